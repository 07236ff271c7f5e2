"""The methods `invert` offers, by name."""

from __future__ import annotations

METHODS = ("smooth",)
