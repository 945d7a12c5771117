#!/usr/bin/env bash
# Make .venv with what a run or the tests need; bring Chromium by the system's package manager.
#   tools/setup.sh run | test | browser
set -euo pipefail
cd "$(dirname "$0")/.."

as_root() {
  if [ "$(id -u)" = 0 ]; then "$@"; elif command -v sudo >/dev/null && sudo -n true 2>/dev/null; then sudo -n "$@"; else return 1; fi
}

bring() { # bring PACKAGE...: install Debian packages where we may
  command -v apt-get >/dev/null || return 1
  as_root env DEBIAN_FRONTEND=noninteractive apt-get update -q >/dev/null || return 1
  as_root env DEBIAN_FRONTEND=noninteractive apt-get install -y -q --no-install-recommends "$@" >/dev/null
}

python() {
  for name in python3 python3.13 python3.12 python3.11; do
    if command -v "$name" >/dev/null && "$name" -c 'import sys; sys.exit(sys.version_info < (3, 11))'; then
      echo "$name"; return
    fi
  done
  echo "Tapwitness needs Python 3.11 or newer. Install it, then run make again." >&2
  exit 1
}

venv() { # venv EXTRA: install the project as it lies here, with that extra
  local py; py=$(python)
  if ! [ -x .venv/bin/python ]; then
    "$py" -m venv .venv 2>/dev/null || { rm -rf .venv; bring python3-venv && "$py" -m venv .venv; } || {
      echo "Python cannot make a virtual environment. Install python3-venv, then run make again." >&2; exit 1; }
  fi
  .venv/bin/python -m pip install -q --disable-pip-version-check -e ".$1"
}

browser() {
  for name in chromium chromium-browser google-chrome; do
    command -v "$name" >/dev/null && return
  done
  echo "Bringing Chromium for the browser tests ..." >&2
  bring chromium || { echo "The browser tests need Chromium. Install it, then run make test again." >&2; exit 1; }
}

case "${1:-}" in
  run) venv "" && touch .venv/.run ;;
  test) venv "[central,test]" && touch .venv/.run .venv/.test ;;
  browser) browser ;;
  *) echo "tools/setup.sh run | test | browser" >&2; exit 2 ;;
esac
