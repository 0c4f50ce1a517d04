"""`python -m cds` is the command `gdmt-cards`."""

from cds.cli import main

if __name__ == "__main__":
    main(prog_name="gdmt-cards")
