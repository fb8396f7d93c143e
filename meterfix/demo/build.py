"""Rebuilds the stored example from its seed.

    python -m meterfix.demo.build sample_logs

writes the example month's logs into the folder (removing logs there that the month does not
have) and its site file into the package, `meterfix/demo/example/site.toml`.
"""

from __future__ import annotations

import sys
from pathlib import Path

from meterfix.demo.simulator import simulate
from meterfix.demo.works import FEEDS

_SITE_FILE = Path(__file__).resolve().parent / "example" / "site.toml"


def build(folder: Path, site_file: Path = _SITE_FILE) -> int:
    """Write the example month.

    Parameters
    ----------
    folder : Path
        Of the logs.
    site_file : Path
        Of the site file.

    Returns
    -------
    int
        How many bytes of logs there are now.
    """
    simulated = simulate()
    for source in (*(feed.name for feed in FEEDS), "weather"):
        for stale in sorted((folder / source).glob("*.csv*")):
            stale.unlink()
    simulated.write_logs(folder)
    site_file.parent.mkdir(parents=True, exist_ok=True)
    site_file.write_bytes(simulated.site_text.encode())
    return sum(path.stat().st_size for path in folder.glob("*/*.csv*"))


def main(arguments: list[str]) -> int:
    """Run the command; return its exit code."""
    if len(arguments) != 1:
        sys.stderr.write("usage: python -m meterfix.demo.build FOLDER\n")
        return 2
    size = build(Path(arguments[0]))
    sys.stdout.write(f"{arguments[0]}: {size} bytes of logs\n")
    return 0


if __name__ == "__main__":
    sys.exit(main(sys.argv[1:]))
