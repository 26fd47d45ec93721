"""`python -m vidkin`: the command line."""

from vidkin.cli import main

if __name__ == "__main__":  # worker processes import this file too
    main()
