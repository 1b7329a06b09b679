"""The logbook: measured trials and fits over months, in one SQLite file, and questions to it.

::

    store.py      the file: schema, migrations, adding, reading back
    selection.py  which trials: by robot, surface, date, factor
    trend.py      a quantity over time, with limits and signals
    checks.py     a short new trial against a stored fit
    constants.py  commands for the robot's program: CSV, JSON, C header, Python module
    exchange.py   everything as a folder of open files, and back
"""
