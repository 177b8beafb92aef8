"""``python -m profileplan``: the command line."""

from profileplan.cli import main

main()
