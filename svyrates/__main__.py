"""`python -m svyrates` is the command line."""

from __future__ import annotations

from svyrates.command import main

if __name__ == "__main__":
    main()
