"""Make examples/report.png and examples/console.png in headless Chromium: the example's report
page, and the console with one plan pinned beside another.

python examples/picture.py [path of chromium]
"""

from __future__ import annotations

import datetime
import subprocess
import sys
import tempfile
from pathlib import Path

from scheduler import plan, read_settings
from scheduler.console.example import example_desk

HERE = Path(__file__).parent
FLAGS = (
    "--headless --no-sandbox --disable-gpu --disable-quic --no-first-run --hide-scrollbars "
    "--disable-background-networking --disable-component-update --disable-sync"
)


def main() -> None:
    chromium = sys.argv[1] if len(sys.argv) > 1 else "chromium"
    with tempfile.TemporaryDirectory() as directory:
        folder = Path(directory)
        report(folder)
        page = (folder / "report.html").as_uri()
        shoot(chromium, page, HERE / "report.png", "1280,1530", folder)
        command = [sys.executable, "-m", "scheduler", "console", "--port", "0", "--quiet"]
        with subprocess.Popen(command, stdout=subprocess.PIPE, text=True) as server:
            assert server.stdout is not None
            address = server.stdout.readline().strip()
            state = f"tables={example_desk().mark}&order=HB-1&urgency=0.8&pin.=yes"
            shoot(chromium, f"{address}#{state}", HERE / "console.png", "1366,768", folder, 0.9)
            server.terminate()


def report(folder: Path) -> None:
    result = plan(
        HERE / "orders.csv",
        HERE / "market.csv",
        profiles=HERE / "profiles.csv",
        readings=HERE / "readings.csv",
        settings=read_settings(HERE / "settings.toml"),
        date=datetime.date(2026, 3, 5),
        at="09:30",
    )
    result.write(folder, report=True)


def shoot(
    chromium: str, address: str, picture: Path, size: str, folder: Path, scale: float = 1.0
) -> None:
    command = [
        chromium,
        *FLAGS.split(),
        "--virtual-time-budget=8000",
        f"--window-size={size}",
        f"--force-device-scale-factor={scale}",
        f"--user-data-dir={folder / 'profile'}",
        f"--screenshot={picture}",
        address,
    ]
    subprocess.run(command, check=True, capture_output=True)


if __name__ == "__main__":
    main()
