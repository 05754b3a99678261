"""Humbell watches rotating machines through permanently mounted accelerometers."""

__all__ = ["__version__"]

__version__ = "0.1.0"
