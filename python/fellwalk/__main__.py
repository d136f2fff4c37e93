"""python -m fellwalk"""

import sys

from fellwalk.cli import main

sys.exit(main())
