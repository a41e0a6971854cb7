"""`python -m tnquench` is the command `tnquench`."""

from __future__ import annotations

from tnquench.cli import main

if __name__ == "__main__":
    main()
