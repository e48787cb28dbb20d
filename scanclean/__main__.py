"""``python -m scanclean``."""

from scanclean.cli import main

if __name__ == "__main__":
    main()
