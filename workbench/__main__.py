"""`python -m workbench`: the same program as the `workbench` command."""

from workbench.cli import main

if __name__ == "__main__":
    raise SystemExit(main())
