"""Arguments and options that commands share."""

from __future__ import annotations

from pathlib import Path
from typing import Annotated

import typer

__all__ = [
    "DebugOption",
    "FolderArgument",
    "OutOption",
    "OverwriteOption",
    "QuietOption",
    "RecipeArgument",
    "StepsOption",
]

RecipeArgument = Annotated[Path, typer.Argument(metavar="RECIPE", help="TOML file of one galaxy.")]
FolderArgument = Annotated[Path, typer.Argument(metavar="DIR", help="Product folder.")]
OutOption = Annotated[Path, typer.Option("--out", metavar="DIR", help="Product folder to write.")]
OverwriteOption = Annotated[
    bool, typer.Option("--overwrite", help="Replace products made from something else.")
]
StepsOption = Annotated[
    bool, typer.Option("--steps", help="Print what each step did to each map (DIR/steps.ecsv).")
]
QuietOption = Annotated[bool, typer.Option("--quiet", help="No progress, no log.")]
DebugOption = Annotated[bool, typer.Option("--debug", help="Show where an error arose.")]
