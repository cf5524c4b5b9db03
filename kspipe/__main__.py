"""Run the command line as ``python -m kspipe``."""

from kspipe.cli import main

main()
