"""``python -m specsolve`` is the command line."""

from specsolve.cli.main import main

if __name__ == "__main__":
    main()
