"""meshctl: from a wished matrix, route or power split to drive voltages on a real photonic chip."""

__version__ = "0.1.0"
