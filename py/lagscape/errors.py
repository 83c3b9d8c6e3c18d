"""The errors Lagscape raises on purpose. Each subclasses a built-in, so a caller may catch either."""

__all__ = ["CaseFormatError", "InvalidInputError", "RecordingError"]


class InvalidInputError(ValueError):
    """A number or a combination of numbers that the model cannot take. The message says what, the rule, what came."""


class CaseFormatError(ValueError):
    """A case file or link that cannot be read. The message says why and what to do."""


class RecordingError(ValueError):
    """A recording that cannot be read or measured. The message says where and what to do."""
