"""`python -m mfeat` is the command `mfeat`."""

import sys

from mfeat.cli import main

sys.exit(main())
