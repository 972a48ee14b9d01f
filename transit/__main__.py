"""`python -m transit` is the same program as `leadline`."""

from transit.cli.main import main

if __name__ == "__main__":
    main()
