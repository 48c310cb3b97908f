"""``python -m shardfold`` is the command ``shardfold``."""

from shardfold.cli import main

if __name__ == "__main__":
    main()
