"""``python -m morph`` is the same as ``morph``."""

from morph.cli.main import entry

if __name__ == "__main__":
    entry()
