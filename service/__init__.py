"""tailrace: how much capital a book of losses needs, which sub-portfolio uses it, and how sure the figure is."""

from os import environ

__version__ = "0.1.0"

environ.setdefault("OPENBLAS_NUM_THREADS", "1")  # before NumPy is imported: threads are ours, and change no bits
