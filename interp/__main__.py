"""`python -m interp`: the command `rockhead`."""

from interp.cli import main

main(prog_name="python -m interp")
