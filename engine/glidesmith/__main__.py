"""``python -m glidesmith`` is the command ``glidesmith``."""

from glidesmith.command import main

if __name__ == "__main__":
    main()
