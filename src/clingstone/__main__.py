"""``python -m clingstone``."""

from clingstone.cli import main

if __name__ == "__main__":
    main()
