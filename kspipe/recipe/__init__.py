"""One TOML file per galaxy, checked whole before any map is opened."""

from kspipe.recipe.load import load_recipe, parse_recipe
from kspipe.recipe.models import Recipe

__all__ = ["Recipe", "load_recipe", "parse_recipe"]
