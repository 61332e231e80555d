"""Run the command line as ``python -m reconcile``."""

from reconcile.cli import main

raise SystemExit(main())
