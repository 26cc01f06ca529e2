"""duskcheck: the evening check of positions, books and the firm against their signed risk limits."""

__version__ = "0.1.0"
