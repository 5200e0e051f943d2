"""Run the command line as ``python -m hurstfit``."""

from hurstfit.cli import main

main(prog_name="hurstfit")
