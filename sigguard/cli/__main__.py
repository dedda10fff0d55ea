"""``python -m sigguard.cli``."""

from sigguard.cli import main

if __name__ == "__main__":
    main()
