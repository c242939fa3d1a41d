"""`python -m withstand` is the command line."""

from withstand.cli import main

if __name__ == "__main__":
    main()
