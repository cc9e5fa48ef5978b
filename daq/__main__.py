"""`python -m daq`: the same as `tercet`."""

import sys

from daq.cli import main

sys.exit(main())
