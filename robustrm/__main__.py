"""``python -m robustrm`` is the command line."""

from robustrm.cli import main

if __name__ == "__main__":
    main(prog_name="robustrm")
