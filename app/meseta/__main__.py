"""``python -m meseta``: the same as the command ``meseta``."""

from meseta.command import main

if __name__ == "__main__":
    main()
