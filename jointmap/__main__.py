"""`python -m jointmap` is the command `jointmap`."""

import sys

from jointmap.cli import main

sys.exit(main())
