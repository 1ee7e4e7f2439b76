"""python -m meshctl."""

import sys

from meshctl.cli import main

sys.exit(main())
