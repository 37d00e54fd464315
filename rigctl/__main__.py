"""``python -m rigctl`` and the console command ``pairctl``."""

from rigctl.cli import main

if __name__ == "__main__":
    main()
