"""Pixels to turns: everything that looks at a clip, and nothing that knows about trials or files."""
