"""`python -m roa`: the command line, for where no script of that name is on the path."""

from roa.cli import main

if __name__ == "__main__":
    raise SystemExit(main())
