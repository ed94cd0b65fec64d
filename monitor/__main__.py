"""`python -P -m monitor` does what the command `limbtell` does."""

from monitor.cli import main

if __name__ == "__main__":
    main()
