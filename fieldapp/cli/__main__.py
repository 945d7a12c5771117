"""``python -m fieldapp.cli``."""

from fieldapp.cli import main

main()
