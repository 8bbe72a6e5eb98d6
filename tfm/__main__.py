"""``python -m tfm`` runs the command line."""

from tfm.cli import main

if __name__ == "__main__":
    main()
