"""``python -m ohmward`` is the same as ``ohmward``."""

from ohmward.cli.main import main

if __name__ == "__main__":
    main()
