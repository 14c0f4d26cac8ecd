"""``python -m shaper`` is the command ``shaper``."""

from shaper.cli import main

raise SystemExit(main())
