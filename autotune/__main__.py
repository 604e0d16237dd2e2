"""``python -m autotune`` is the command ``autotune``."""

from autotune.cli import main

if __name__ == "__main__":
    main()
