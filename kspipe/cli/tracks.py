"""The command that draws a relation without maps."""

from __future__ import annotations

from pathlib import Path
from typing import Annotated

import typer

__all__ = ["tracks_command"]

Values = list[float]


def tracks_command(
    law: Annotated[str, typer.Argument(metavar="RELATION", help="As in: kspipe list relations.")],
    out: Annotated[Path, typer.Option("--out", metavar="DIR", help="Folder to write.")],
    metallicity: Annotated[
        Values, typer.Option("--metallicity", help="12+log10(O/H); may be repeated.")
    ] = [],  # noqa: B006 - typer reads the default, nothing writes to it
    g0: Annotated[Values, typer.Option("--g0", help="Field over the solar one.")] = [],  # noqa: B006
    rho_sd: Annotated[Values, typer.Option("--rho-sd", help="Stars, dark matter: Msun/pc3.")] = [],  # noqa: B006
    sigma_star: Annotated[Values, typer.Option("--sigma-star", help="Msun/pc2.")] = [],  # noqa: B006
    omega: Annotated[Values, typer.Option("--omega", help="Rotation, km/s/kpc.")] = [],  # noqa: B006
    beta: Annotated[Values, typer.Option("--beta", help="Slope of rotation.")] = [],  # noqa: B006
    parameter: Annotated[
        list[str], typer.Option("--parameter", metavar="NAME=VALUE", help="Of the relation.")
    ] = [],  # noqa: B006
    low: Annotated[float, typer.Option("--low", help="Least gas, Msun/pc2.")] = 1.0,
    high: Annotated[float, typer.Option("--high", help="Most gas, Msun/pc2.")] = 1000.0,
    overwrite: Annotated[bool, typer.Option("--overwrite", help="Replace older tracks.")] = False,
    debug: Annotated[bool, typer.Option("--debug", help="Show where an error arose.")] = False,
) -> None:
    """Draw a relation against gas, without maps: table and figure."""
    from kspipe.cli.session import session

    with session(quiet=True, debug=debug):
        from kspipe.api import tracks
        from kspipe.core.errors import InputError

        given: dict[str, float] = {}
        for text in parameter:
            name, _, value = text.partition("=")
            try:
                given[name.strip()] = float(value)
            except ValueError:
                do = "type, for example, --parameter clumping=5"
                raise InputError.at("--parameter", f"{text!r} is not NAME=VALUE", do) from None
        at = {
            "oh": metallicity,
            "g0": g0,
            "rho_sd": rho_sd,
            "sigma_star": sigma_star,
            "omega": omega,
            "beta": beta,
        }
        at = {name: values for name, values in at.items() if values}
        tracks(law, low=low, high=high, at=at, parameters=given, out=out, overwrite=overwrite)
    typer.echo(f"written: {out / 'tracks.ecsv'}")
