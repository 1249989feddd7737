"""tailrace: how much capital a book of losses needs, which sub-portfolio uses it, and how sure the figure is."""

__version__ = "0.1.0"
