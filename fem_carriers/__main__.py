"""``python -m fem_carriers`` is the command line."""

from .command import main

if __name__ == "__main__":
    main()
