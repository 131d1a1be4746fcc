"""Which rows of a regression hang together, what that does to its intervals, and what to report."""

__version__ = "0.1.0"
