"""Printed sheets in true scale: robot markers, floor cards, bars to check them with, and short advice."""
