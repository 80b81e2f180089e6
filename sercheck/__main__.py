"""``python -m sercheck`` is the command ``sercheck``."""

from sercheck.cli import main

if __name__ == "__main__":
    main()
