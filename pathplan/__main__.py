"""`python -m pathplan`: the command line."""

if __name__ == "__main__":
    try:
        from pathplan.cli import main

        status = main()
    except KeyboardInterrupt:  # so early that main had not begun
        status = 130
    raise SystemExit(status)
