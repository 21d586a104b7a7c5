"""Lets ``python -m prevmap`` do what ``prevmap`` does."""

import sys

from prevmap.cli import main

if __name__ == "__main__":
    sys.exit(main())
