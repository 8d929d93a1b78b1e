"""Modulation of bar patterns, from the standard deviations of regions over their groups."""

from __future__ import annotations
