"""``python -m elbowroom``."""

from elbowroom.cli.main import main

if __name__ == "__main__":
    main()
