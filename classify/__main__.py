"""``python -m classify`` is the same command as ``landassay``."""

from classify.cli.main import entry

if __name__ == "__main__":
    entry()
