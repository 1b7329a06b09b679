"""Rendered demonstration clips and the renderer that makes them."""
