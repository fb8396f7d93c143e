"""`python -m meterfix` and the `meterfix` command."""

from __future__ import annotations

from meterfix.faces.commands import main

if __name__ == "__main__":
    main()
