"""python -m firnlight"""

import sys

from firnlight.cli import main

sys.exit(main())
