"""``python -m fieldapp.cli``."""

from fieldapp.cli import main

if __name__ == "__main__":
    main()
