"""``python -m xlplan`` runs the command line."""

from xlplan.cli import main

if __name__ == "__main__":
    raise SystemExit(main())
