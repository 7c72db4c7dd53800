"""Run the command line with ``python -m viewshed``."""

from viewshed.cli.main import main

if __name__ == "__main__":
    main()
