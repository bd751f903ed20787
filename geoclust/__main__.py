"""`python -m geoclust` is the command `geoclust`."""

from geoclust.cli import main

if __name__ == "__main__":
    main()
