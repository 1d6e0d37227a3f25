"""``python -m forecaster`` is the command ``trikymia``."""

from forecaster.cli import main

raise SystemExit(main())
