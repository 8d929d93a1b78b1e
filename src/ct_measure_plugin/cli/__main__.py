"""So that ``python -m ct_measure_plugin.cli`` is the command too."""

import sys

from ct_measure_plugin.cli import main

sys.exit(main())
