"""Readers of ocean files; each returns water columns, the one in-memory form of any ocean input."""

from habitat.ocean.inspection import inspect
from habitat.ocean.opening import open_ocean

__all__ = ["inspect", "open_ocean"]
