"""``python -m wakeledger`` is the command ``wakeledger``."""

from wakeledger.cli import main

if __name__ == "__main__":
    main()
