"""Acceptance decisions for laboratory batches, signed and kept."""

__version__ = "0.1.0"
