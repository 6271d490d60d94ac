"""``python -m bigsvd``: the command line without its installed name."""

from bigsvd.cli import main

if __name__ == "__main__":
    main(prog_name="bigsvd")
