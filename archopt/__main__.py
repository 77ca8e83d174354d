"""``python -m archopt``: the command line."""

from archopt.cli import main

if __name__ == "__main__":
    main()
