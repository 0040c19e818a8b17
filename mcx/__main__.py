"""`python -m mcx`: the command line."""

from mcx.cli import main

if __name__ == "__main__":
    main()
