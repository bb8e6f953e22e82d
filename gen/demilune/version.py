"""The version of Demilune, as it stands in emitted files."""

__version__ = "0.1.0"
