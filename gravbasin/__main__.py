"""Run the command line as ``python -m gravbasin``."""

from gravbasin.cli import main

if __name__ == "__main__":
    main()
