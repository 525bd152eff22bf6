"""``python -m xcorr``."""

import sys

from xcorr.cli import main

sys.exit(main())
