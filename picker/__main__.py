"""`python -m picker`: the commands of picking alone."""

from picker.cli import main

main(prog_name="python -m picker")
