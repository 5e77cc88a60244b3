"""``python -m rxchain`` is the ``rxchain`` command."""

import sys

from rxchain.cli.main import main

sys.exit(main())
