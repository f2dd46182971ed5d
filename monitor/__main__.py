"""`python -m monitor` is the command `outlet`."""

from monitor.cli import main

if __name__ == "__main__":
    main()
