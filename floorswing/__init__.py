"""Floorswing: how far a small two-wheeled robot really turns, from a clip filmed from above.

The steps of the command line as functions, with the same defaults::

    from floorswing import measure
"""

__version__ = "0.1.0"
