"""`.venv/bin/python tools/bench` is `.venv/bin/python tools/bench/run.py`."""

import sys

from run import main

sys.exit(main())
