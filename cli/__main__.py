"""Run the command line as ``python -m trackfit_cli``."""

import sys

from .guard import main

sys.exit(main())
