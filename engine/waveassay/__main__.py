"""``python -m waveassay``."""

from waveassay.cli import main

if __name__ == "__main__":
    main()
