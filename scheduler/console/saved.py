"""A plan's files: in an archive for the browser, or in the directory the console was given."""

from __future__ import annotations

import io
import tempfile
import zipfile
from pathlib import Path

from scheduler.plan import Plan

_STAMP = (1980, 1, 1, 0, 0, 0)  # the same plan gives the same bytes


def archive(plan: Plan) -> bytes:
    """What `Plan.write(report=True)` writes, as a ZIP file."""
    packed = io.BytesIO()
    with tempfile.TemporaryDirectory() as name, zipfile.ZipFile(packed, "w") as zipped:
        folder = Path(name) / "plan"
        plan.write(folder, report=True)
        for file in sorted(folder.iterdir()):
            entry = zipfile.ZipInfo(file.name, _STAMP)
            zipped.writestr(entry, file.read_bytes(), zipfile.ZIP_DEFLATED)
    return packed.getvalue()
