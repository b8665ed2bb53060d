"""`python -m rtctl.cli`: the command line without its console script, for children that must use the same interpreter."""

from rtctl.cli import main

main()
