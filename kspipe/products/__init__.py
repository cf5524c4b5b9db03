"""What a reader wants to see, drawn from the product folder alone."""

from kspipe.products.figures import draw_figures

__all__ = ["draw_figures"]
