"""``python -m latticedip``: the same as the command ``latticedip``."""

from latticedip.cli.main import main

if __name__ == "__main__":
    main(prog_name="latticedip")
