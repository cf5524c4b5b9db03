"""Figures of trials: the ranked budget, and the resolution ladder."""

from __future__ import annotations

import json
import math
from pathlib import Path
from typing import Any, Final

import numpy as np
from matplotlib.axes import Axes
from matplotlib.figure import Figure
from matplotlib.ticker import FuncFormatter

from kspipe import __version__
from kspipe.core.errors import Fault, OutputError
from kspipe.products.style import (
    WIDE_INCHES,
    figure_style,
    in_figure,
    new_figure,
    relation_look,
    save_figure,
    write_name,
)
from kspipe.stages.folder import ProductFolder, fingerprint

__all__ = ["draw_budget", "draw_ladder"]

# Bars of the assumptions that move a quantity most; the rest stand together.
BARS: Final = 6
RISE, FALL, REST = "#0072B2", "#D55E00", "0.75"
PANEL_COLUMNS: Final = 3


def draw_budget(folder: Path) -> bool:
    """Draw ``figures/budget.pdf`` and ``.png`` of a product folder; False where reused.

    Raises
    ------
    OutputError
        If the folder holds no budget.
    """
    return _draw(folder, "budget", _budget_figure)


def draw_ladder(folder: Path) -> bool:
    """Draw ``figures/ladder.pdf`` and ``.png`` of a product folder; False where reused.

    Raises
    ------
    OutputError
        If the folder holds no ladder.
    """
    return _draw(folder, "ladder", _ladder_figure)


def _draw(folder: Path, stage: str, draw: Any) -> bool:
    products = ProductFolder.open(folder)
    if stage not in products.stages:
        raise OutputError(Fault(str(folder), f"holds no {stage}", f"run: kspipe {stage} {folder}"))
    made_from = {stage: products.stages[stage]["fingerprint"], "kspipe": __version__}
    prints = {f"{stage}_figure": fingerprint(made_from)}
    if not products.check(prints, overwrite=True):
        return False
    plain = json.loads((folder / f"{stage}.json").read_text(encoding="utf-8"))
    with products.publish(prints) as staging, figure_style():
        (staging / "figures").mkdir()
        save_figure(draw(plain), staging / "figures" / stage)
    return True


# --- The budget ----------------------------------------------------------------------------------

_TITLES: Final = {
    "slope": "slope",
    "level": r"log$_{10}$ $\Sigma_\mathrm{SFR}$ at the pivot",
    "scatter": "intrinsic scatter [dex]",
    "t_dep": r"log$_{10}$ $t_\mathrm{dep}$, molecular",
    "t_dep_gas": r"log$_{10}$ $t_\mathrm{dep}$, total gas",
}


def _title(name: str) -> str:
    if name in _TITLES:
        return _TITLES[name]
    relation = name.removeprefix("bias ")
    shown = relation if len(relation) <= 22 else relation[:21] + "…"
    return f"obs. / pred. [dex]: {shown}"


def _budget_figure(budget: dict[str, Any]) -> Figure:
    names = list(budget["quantities"])
    rows = math.ceil(len(names) / PANEL_COLUMNS)
    height, width, left, gap = 1.45, 1.05, 1.28, 0.5
    figure = new_figure(rows * (height + gap) + 0.55)
    for i, name in enumerate(names):
        row, column = divmod(i, PANEL_COLUMNS)
        bottom = (rows - 1 - row) * (height + gap) + 0.5
        box = in_figure(figure, left + column * (WIDE_INCHES - 0.05) / 3.0, bottom, width, height)
        _draw_bars(figure.add_axes(box), budget, name)
    beside = (
        f"shift for one sigma of each assumption; {budget['n_draws']} draws, "
        f"{budget['n_samples']} samples"
    )
    write_name(figure, 0.1, budget["galaxy"].replace("$", r"\$"), beside)
    figure.text(
        *in_figure(figure, 0.1, 0.08, 0, 0)[:2],
        "blue rises, orange falls; grey band: random 1-sigma error;  bracket: all assumptions "
        "together, 16 to 84 %",
        size=8,
    )
    return figure


def _draw_bars(axes: Axes, budget: dict[str, Any], name: str) -> None:
    quantity = budget["quantities"][name]
    ranked = [entry for entry in budget["ranked"][name] if entry["shift"]]
    shown, rest = ranked[:BARS], ranked[BARS:]
    labels = [entry["assumption"] for entry in shown]
    sizes = [entry["shift"] for entry in shown]
    colours = [RISE if size > 0 else FALL for size in sizes]
    if rest:
        labels.append(f"{len(rest)} others")
        sizes.append(math.hypot(*(entry["shift"] for entry in rest)))
        colours.append(REST)
    places = np.arange(len(sizes))
    random = quantity["random"]
    if random is not None:
        axes.axvspan(-random, random, color="0.9", zorder=0)
    axes.barh(places, sizes, color=colours, height=0.7, zorder=2)
    axes.axvline(0.0, color="0.3", linewidth=0.6, zorder=3)
    low, high = quantity["low"], quantity["high"]
    if low is not None and high is not None:
        at = len(sizes) + 0.1
        axes.plot([low, high], [at, at], color="black", marker="|", linewidth=1.2, clip_on=False)
        places, labels = np.append(places, at), [*labels, "together"]
    axes.set(yticks=places, ylim=(len(places) - 0.3, -0.7))
    axes.set_yticklabels(labels, size=7)
    axes.tick_params(axis="y", length=0)
    axes.tick_params(axis="x", labelsize=7)
    axes.locator_params(axis="x", nbins=4)
    title = _title(name)
    # Centred on panel and labels together: a long title would run into the next panel.
    axes.set_title(title, size=8, pad=3, x=0.5 if len(title) < 16 else 0.0)


# --- The ladder ----------------------------------------------------------------------------------


def _ladder_figure(ladder: dict[str, Any]) -> Figure:
    rungs = ladder["rungs"]
    figure = new_figure(2.75)
    beams = np.array([rung["beam_pc"] for rung in rungs])
    fitted = np.array([rung["line"]["is_fitted"] for rung in rungs])
    limited = np.array([bool(rung["limits"]) for rung in rungs])
    panels = [
        figure.add_axes(in_figure(figure, 0.62 + k * 2.38, 0.62, 1.62, 1.6)) for k in range(3)
    ]
    for axes in panels:
        axes.set(xscale="log", xlim=(beams[0] / 1.4, beams[-1] * 1.4), xlabel="beam [pc]")
        axes.axvspan(1.0, 500.0, color="0.93", zorder=0)
        axes.set_xticks(beams, [f"{beam:.3g}" if beam < 1e3 else f"{beam:.0f}" for beam in beams])
        axes.set_xticks([], minor=True)
    for key, error, axes, label in (
        ("slope", "slope_error", panels[0], "slope"),
        ("scatter_dex", "scatter_error", panels[1], "intrinsic scatter [dex]"),
    ):
        for chosen, face in ((fitted & ~limited, "black"), (fitted & limited, "white")):
            values, errors = (
                np.array(
                    [r["line"][k] or math.nan for r, c in zip(rungs, chosen, strict=True) if c]
                )
                for k in (key, error)
            )
            upper = np.array(
                [r["line"]["is_limit"] for r, c in zip(rungs, chosen, strict=True) if c], dtype=bool
            )
            if key == "scatter_dex" and upper.any():
                errors = np.where(upper, 0.3 * values, errors)
                axes.errorbar(
                    beams[chosen],
                    values,
                    errors,
                    fmt="o",
                    markersize=4,
                    uplims=upper,
                    color="black",
                    mfc=face,
                )
            else:
                axes.errorbar(
                    beams[chosen], values, errors, fmt="o", markersize=4, color="black", mfc=face
                )
        axes.set_ylabel(label)
    panels[0].axhline(1.0, color="0.6", linewidth=0.6, linestyle=":")
    names = list(rungs[0]["relations"])
    for i, name in enumerate(names):
        ratios = [rung["relations"][name]["sum_ratio"] or math.nan for rung in rungs]
        panels[2].plot(beams, ratios, marker="o", markersize=3, label=name, **relation_look(i))
    panels[2].axhline(1.0, color="0.6", linewidth=0.6, linestyle=":")
    panels[2].set(yscale="log", ylabel="sum observed / predicted")
    for which in (panels[2].yaxis.set_major_formatter, panels[2].yaxis.set_minor_formatter):
        which(FuncFormatter(lambda value, _: f"{value:g}"))
    if names:
        panels[2].legend(fontsize=7, loc="best")
    write_name(
        figure,
        0.1,
        ladder["galaxy"].replace("$", r"\$"),
        "resolution ladder",
    )
    missing = [f"{r['beam_pc']:.0f} pc" for r in rungs if not r["line"]["is_fitted"]]
    words = "open: sampling-limited; grey: below 500 pc"
    if missing:
        words += f"; no fit at {', '.join(missing)} (too few samples)"
    figure.text(*in_figure(figure, 0.1, 0.08, 0, 0)[:2], words, size=8)
    return figure
