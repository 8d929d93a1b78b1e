"""Slice sensitivity profile: how far along z a slice reaches, from a bead, a wire or a ramp."""

from __future__ import annotations
