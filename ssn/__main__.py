"""``python -m ssn``."""

from .command import main

if __name__ == "__main__":
    main("python -m ssn")
