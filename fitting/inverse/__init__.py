"""From readings to estimates."""

from .table import fit_table

__all__ = ["fit_table"]
