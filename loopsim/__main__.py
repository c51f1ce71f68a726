"""`python -m loopsim`."""

from loopsim.cli import entry

if __name__ == "__main__":
    entry()
