"""``python -m assignable.cli``, for where the command is not on the path."""

import sys

from . import main

sys.exit(main())
