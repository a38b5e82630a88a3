"""`python -m pathplan`: the command line."""

from pathplan.cli import main

if __name__ == "__main__":
    raise SystemExit(main())
