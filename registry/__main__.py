"""``python -m registry`` is the command ``rollbook``."""

from registry.cli import main

if __name__ == "__main__":
    main(prog_name="rollbook")
