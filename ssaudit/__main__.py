"""``python -m ssaudit``: the command line."""

import sys

from ssaudit.cli import main

sys.exit(main())
