"""Tracks of relations as a table and a figure, without any map."""

from __future__ import annotations

from collections.abc import Sequence
from pathlib import Path
from textwrap import wrap
from typing import Any, Final

import numpy as np
from astropy.table import Column, Table
from matplotlib import colormaps
from matplotlib.figure import Figure
from numpy.typing import NDArray

from kspipe.core.citations import cite
from kspipe.core.errors import Fault, OutputError
from kspipe.products.style import (
    GAS_UNIT,
    SFR_UNIT,
    SIGMA,
    figure_style,
    new_figure,
    save_figure,
)
from kspipe.relations import LAW_INPUTS, LAWS, Track

__all__ = ["OUTSIDE_LINE", "draw_tracks_figure", "in_and_out", "tracks_table", "write_tracks"]

Array = NDArray[np.float64]
OUTSIDE_LINE: Final = (0, (2, 2))
MOST_DECADES: Final = 1e-6
PRODUCTS: Final = ("tracks.ecsv", "tracks.pdf", "tracks.png")


def tracks_table(tracks: Sequence[Track]) -> Table:
    """Put curves one below the other.

    Parameters
    ----------
    tracks : sequence of Track
        Of one relation.

    Returns
    -------
    astropy.table.Table
        A row for each point: what was fixed, the gas, what is predicted, and whether it is outside
        the range of the relation or has no prediction.
    """
    first = tracks[0]
    law = LAWS.get(first.law)
    table = Table(
        meta={
            "relation": law.key,
            "formula": law.formula,
            "source": f"{cite(law.cite)}; {law.where}",
            "certainty": law.certainty,
            "predicts": law.statistic,
            "parameters": dict(first.parameters),
        }
    )

    def add(name: str, parts: list[Array], unit: str, description: str) -> None:
        table.add_column(
            Column(np.concatenate(parts), name=name, unit=unit or None, description=description)
        )

    for name in first.at:
        known = LAW_INPUTS[name]
        unit = {"Msun/pc2": "solMass / pc2", "Msun/pc3": "solMass / pc3"}.get(known.unit)
        fixed = [np.full(t.gas.shape, t.at[name]) for t in tracks]
        add(name, fixed, unit or known.unit.replace("km/s/kpc", "km / (s kpc)"), known.meaning)
    add(law.gas, [t.gas for t in tracks], "solMass / pc2", LAW_INPUTS[law.gas].meaning)
    predicted = [t.prediction for t in tracks]
    add("sigma_sfr", [p.sigma_sfr for p in predicted], "solMass / (yr kpc2)", "Kroupa IMF")
    if law.has_fraction:
        parts = [p.f_mol for p in predicted if p.f_mol is not None]
        add("f_mol", parts, "", "molecular fraction of the gas by mass")
    outside, unsolved = zip(*((p.outside_range, p.no_solution) for p in predicted), strict=True)
    add("outside_range", list(outside), "", "an input is outside the range of the relation")
    add("no_solution", list(unsolved), "", "there is no prediction")
    return table


def draw_tracks_figure(tracks: Sequence[Track]) -> Figure:
    """Draw Sigma_SFR, and the molecular fraction where there is one, against the gas.

    Curves are short-dashed where an input is outside the range of the relation.
    """
    law = LAWS.get(tracks[0].law)
    panels = 2 if law.has_fraction else 1
    figure = new_figure(1.2 + 2.8 * panels, 5.6)
    axes = figure.subplots(panels, 1, sharex=True, squeeze=False)[:, 0]
    varied = [n for n in tracks[0].at if len({t.at[n] for t in tracks}) > 1]
    for index, track in enumerate(tracks):
        colour = colormaps["viridis"](0.85 * index / max(len(tracks) - 1, 1))
        line: dict[str, Any]
        line, thin = {"color": colour}, {"color": colour, "ls": OUTSIDE_LINE, "lw": 0.8}
        text = ", ".join(f"{LAW_INPUTS[n].symbol} = {track.at[n]:.4g}" for n in varied)
        prediction = track.prediction
        inside, outside = in_and_out(prediction.sigma_sfr, prediction.outside_range)
        axes[0].plot(track.gas, inside, **line, label=text or law.label)
        axes[0].plot(track.gas, outside, **thin)
        if prediction.f_mol is not None:
            inside, outside = in_and_out(prediction.f_mol, prediction.outside_range)
            axes[1].plot(track.gas, inside, **line)
            axes[1].plot(track.gas, outside, **thin)
    axes[0].set(xscale="log", yscale="log", ylabel=f"{SIGMA['sigma_sfr']} ({SFR_UNIT})")
    if panels == 2:
        axes[1].set(ylim=(-0.02, 1.02), ylabel=r"$f_\mathrm{mol}$")
    axes[-1].set_xlabel(f"{SIGMA[law.gas]} ({GAS_UNIT})")
    fixed = [
        f"{LAW_INPUTS[n].symbol} = {v:.4g}" for n, v in tracks[0].at.items() if n not in varied
    ]
    fixed += [f"{name} = {value:.4g}" for name, value in tracks[0].parameters.items()]
    axes[0].set_title(
        "\n".join([f"{law.label} (a {law.statistic})", *wrap(", ".join(fixed), 80)]), size=8
    )
    if any(t.prediction.outside_range.any() for t in tracks):
        axes[0].plot([], [], color="0.4", ls=OUTSIDE_LINE, lw=0.8, label="outside the range")
    # What is less than a millionth of the most is in the table and below the frame.
    low, high = axes[0].get_ylim()
    axes[0].set_ylim(max(low, MOST_DECADES * high), high)
    axes[0].legend(loc="lower right")
    figure.subplots_adjust(
        left=0.14, right=0.97, bottom=0.12 / panels + 0.04, top=0.88, hspace=0.06
    )
    return figure


def in_and_out(y: Array, is_outside: NDArray[np.bool_]) -> tuple[Array, Array]:
    """Split a curve into the part inside a range and the part outside, which meet."""
    inside = np.where(is_outside, np.nan, y)
    meets = is_outside.copy()
    meets[:-1] |= is_outside[1:]
    meets[1:] |= is_outside[:-1]
    return inside, np.where(meets, y, np.nan)


def write_tracks(tracks: Sequence[Track], out: Path, *, overwrite: bool = False) -> list[Path]:
    """Write tracks.ecsv, tracks.pdf and tracks.png into a folder.

    Raises
    ------
    OutputError
        If they are there already and may not be replaced, or cannot be written.
    """
    paths = [out / name for name in PRODUCTS]
    there = [path.name for path in paths if path.exists()]
    if there and not overwrite:
        raise OutputError(
            Fault(str(out), f"holds {', '.join(there)}", "type another --out, or --overwrite")
        )
    try:
        out.mkdir(parents=True, exist_ok=True)
        tracks_table(tracks).write(paths[0], format="ascii.ecsv", overwrite=True)
        with figure_style():
            save_figure(draw_tracks_figure(tracks), out / "tracks")
    except OSError as error:
        raise OutputError(Fault(str(out), f"cannot be written ({error})")) from error
    return paths
