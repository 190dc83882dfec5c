"""``python -m pcaptool``."""

from pcaptool.cli import main

if __name__ == "__main__":
    main()
