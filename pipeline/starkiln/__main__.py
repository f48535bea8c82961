"""`python -m starkiln` is the command `starkiln`."""

from starkiln.cli import main

if __name__ == "__main__":
    main()
