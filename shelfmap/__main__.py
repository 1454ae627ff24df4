"""``python -m shelfmap`` is the command ``shelfmap``."""

from shelfmap.cli import main

__all__ = ["main"]

if __name__ == "__main__":
    main(prog_name="shelfmap")
