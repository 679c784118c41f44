"""`python -m fieldmover` is the command `fieldmover`."""

import sys

from fieldmover.cli import main

sys.exit(main())
