"""`python -m chansim`."""

import sys

from chansim.cli import main

sys.exit(main())
