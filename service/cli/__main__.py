"""``python -m service.cli``: the same as the console script."""

from service.cli import main

if __name__ == "__main__":
    main()
