"""The command line: arguments, exit codes, progress, result table.

Nothing heavy is imported before a command runs, so that help is instant.
"""

from kspipe.cli.app import main

__all__ = ["main"]
