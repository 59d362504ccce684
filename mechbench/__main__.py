"""``python -m mechbench`` is the command ``mechbench``."""

import sys

from mechbench.cli import main

sys.exit(main())
