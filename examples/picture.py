"""Make examples/report.png: what the example's report page shows, in headless Chromium.

python examples/picture.py [path of chromium]
"""

from __future__ import annotations

import datetime
import subprocess
import sys
import tempfile
from pathlib import Path

from scheduler import plan, read_settings

HERE = Path(__file__).parent
FLAGS = (
    "--headless --no-sandbox --disable-gpu --disable-quic --no-first-run --hide-scrollbars "
    "--disable-background-networking --disable-component-update --disable-sync "
    "--virtual-time-budget=8000 --window-size=1280,1530"
)


def main() -> None:
    chromium = sys.argv[1] if len(sys.argv) > 1 else "chromium"
    result = plan(
        HERE / "orders.csv",
        HERE / "market.csv",
        profiles=HERE / "profiles.csv",
        readings=HERE / "readings.csv",
        settings=read_settings(HERE / "settings.toml"),
        date=datetime.date(2026, 3, 5),
        at="09:30",
    )
    with tempfile.TemporaryDirectory() as directory:
        folder = Path(directory)
        result.write(folder, report=True)
        command = [
            chromium,
            *FLAGS.split(),
            f"--user-data-dir={folder / 'profile'}",
            f"--screenshot={HERE / 'report.png'}",
            (folder / "report.html").as_uri(),
        ]
        subprocess.run(command, check=True, capture_output=True)


if __name__ == "__main__":
    main()
