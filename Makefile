# Each target is one line of help. `make` alone prints them.
SHELL := /bin/bash
PY := .venv/bin/python
.DEFAULT_GOAL := help
.PHONY: help demo test check bench serve

help: ## Print these targets
	@grep -hE '^[a-z]+:.*## ' $(MAKEFILE_LIST) | sed -E 's/^([a-z]+):.*## /  make \1\t/'

.venv/.run: pyproject.toml tools/setup.sh
	@tools/setup.sh run

.venv/.test: pyproject.toml tools/setup.sh
	@tools/setup.sh test

demo: .venv/.run ## Show an invented town: central, a tablet, and a line between them to cut; Ctrl-C ends it
	@$(PY) -m fieldapp.cli demo

serve: .venv/.run ## Run the node of your own data folder
	@$(PY) -m fieldapp.cli serve

test: .venv/.test check ## Run every test, the browser's too
	@tools/setup.sh browser
	@$(PY) -m pytest

check: .venv/.test ## Look at format, lint and types
	@$(PY) -m ruff format --check .
	@$(PY) -m ruff check .
	@$(PY) -m mypy

bench: .venv/.test ## Measure, as ratios against a peer in the same run
	@$(PY) -m tests.bench
