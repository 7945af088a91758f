"""The command line as ``python -m trajcage``."""

from trajcage.cli import main

if __name__ == "__main__":
    main(prog_name="trajcage")
