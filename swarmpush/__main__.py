"""`python -m swarmpush`."""

from swarmpush.cli import main

if __name__ == "__main__":
    main()
