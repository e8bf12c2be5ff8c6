"""Evenblur's library: resolution, smoothing and the record of both.

It knows nothing of the workflow engine: every step command calls one function from here, and each of them can be
called from a notebook just as well.
"""

__version__ = "0.1.0"
