"""``python -m edgewatch``."""

import sys

from edgewatch.commands.cli import main

sys.exit(main())
