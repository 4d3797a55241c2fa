"""``python -P -m monitor``: the same as the console command ``stepwarden``.

Give ``-P``, so that a folder of runs holding a ``monitor.py`` or ``numpy.py`` is never imported.
"""

from __future__ import annotations

import sys

from monitor.cli import main

sys.exit(main())
