"""Docked measuring tools for CT volumes in napari."""
