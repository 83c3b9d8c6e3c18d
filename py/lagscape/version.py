"""The version of Lagscape: here, so that the page has it too, and in `pyproject.toml`; a test compares the two."""

__all__ = ["VERSION"]

VERSION = "0.1.0"
