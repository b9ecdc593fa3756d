"""``python -m glidefit`` is the same as ``glidefit``."""

from glidefit.commands.main import main

if __name__ == "__main__":
    main()
