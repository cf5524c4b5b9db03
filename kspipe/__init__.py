"""From maps of a nearby galaxy to surface densities, predictions and residual maps.

The face of the library: names are loaded when first used, so that ``import kspipe`` and the help
of the command line stay instant.
"""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

__version__ = "0.1.0"

_FACE = {
    "Comparison": "kspipe.api",
    "KspipeError": "kspipe.core.errors",
    "KspipeWarning": "kspipe.core.errors",
    "MapError": "kspipe.core.errors",
    "Recipe": "kspipe.recipe",
    "RecipeError": "kspipe.core.errors",
    "Reduction": "kspipe.api",
    "alternatives": "kspipe.api",
    "budget": "kspipe.api",
    "chain": "kspipe.api",
    "closure": "kspipe.api",
    "compare": "kspipe.api",
    "explain": "kspipe.recipe.shelf",
    "figures": "kspipe.api",
    "ladder": "kspipe.api",
    "list_family": "kspipe.recipe.shelf",
    "load_recipe": "kspipe.recipe",
    "reduce": "kspipe.api",
    "run": "kspipe.api",
    "tracks": "kspipe.api",
}

__all__ = [
    "Comparison",
    "KspipeError",
    "KspipeWarning",
    "MapError",
    "Recipe",
    "RecipeError",
    "Reduction",
    "__version__",
    "alternatives",
    "budget",
    "chain",
    "closure",
    "compare",
    "explain",
    "figures",
    "ladder",
    "list_family",
    "load_recipe",
    "reduce",
    "run",
    "tracks",
]

if TYPE_CHECKING:
    from kspipe.api import (
        Comparison,
        Reduction,
        alternatives,
        budget,
        chain,
        closure,
        compare,
        figures,
        ladder,
        reduce,
        run,
        tracks,
    )
    from kspipe.core.errors import KspipeError, KspipeWarning, MapError, RecipeError
    from kspipe.recipe import Recipe, load_recipe
    from kspipe.recipe.shelf import explain, list_family


def __getattr__(name: str) -> Any:
    """Load a public name on first use (PEP 562)."""
    if name not in _FACE:
        raise AttributeError(f"module 'kspipe' has no attribute {name!r}")
    from importlib import import_module

    return getattr(import_module(_FACE[name]), name)


def __dir__() -> list[str]:
    """List the public names."""
    return sorted(__all__)
