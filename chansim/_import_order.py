"""Imports pyproj before anything can load ecCodes.

With the wheels current in 2026 (eccodes 2.50 with eccodeslib, pyproj 3.7.2,
Cartopy 0.26) a process that loads ecCodes before PROJ aborts with a double
free; the other order is safe. Importing this module first, at the top of
`chansim/__init__.py`, fixes the order in one place. tests/test_import_order.py
holds it there.
"""

import pyproj  # noqa: F401
