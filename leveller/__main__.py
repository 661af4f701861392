"""`python -m leveller`."""

from leveller.cli import main

if __name__ == "__main__":
    main()
