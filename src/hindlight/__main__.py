"""`python -m hindlight` is the command `hindlight`."""

from hindlight.cli import main

if __name__ == "__main__":
    main()
