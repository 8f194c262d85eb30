"""Nightfringe: plan, order, run and judge nights of shots on a held-atom interferometer."""

__version__ = "0.1.0"

__all__ = ["__version__"]
