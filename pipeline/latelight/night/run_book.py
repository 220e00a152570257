"""What ``run.json`` says of a run; it also clears away products of earlier runs."""

from __future__ import annotations

import json
import time
from collections.abc import Mapping
from datetime import UTC, datetime
from pathlib import Path
from typing import Any

from latelight.config import NightConfig
from latelight.night.record import versions, write_record

__all__ = ["RunBook"]

_FOLDERS = ("cutouts", "differences")


class RunBook:
    """Keeps ``run.json``.

    Parameters
    ----------
    folder : Path
        Output folder.
    run_id : str
        Tells this run from others.
    config : NightConfig
        All settings.
    jobs : int
        Processes.

    Attributes
    ----------
    folder, run_id
        As given.
    products : list of Path
        Files of this run so far.
    inputs : dict
        SHA-256 of every input file.
    """

    def __init__(
        self, folder: Path, run_id: str, config: NightConfig, jobs: int
    ) -> None:
        self.folder = folder
        self.run_id = run_id
        self.products: list[Path] = []
        self.inputs: dict[Path, str] = {}
        self._path = folder / "run.json"
        self._earlier = _products_of(self._path)
        self._start = time.perf_counter()
        self._text: dict[str, Any] = {
            "run": run_id,
            "status": "running",
            "started": _now(),
            "jobs": jobs,
            "versions": versions(),
            "settings": config.model_dump(mode="json"),
        }

    def write(self) -> None:
        """Write what is known so far; earlier products stay listed until the end."""
        write_record(self._path, {**self._text, "products": sorted(self._earlier)})

    def close(self, status: str, counts: Mapping[str, int]) -> None:
        """Write the end of a run, and remove what an earlier one left behind."""
        names = sorted(str(p.relative_to(self.folder)) for p in self.products)
        for name in sorted(self._earlier - set(names)):
            (self.folder / name).unlink(missing_ok=True)
        self._text |= {
            "status": status,
            "ended": _now(),
            "seconds": round(time.perf_counter() - self._start, 3),
            **counts,
            "inputs": [
                {"path": str(path), "sha256": digest}
                for path, digest in sorted(self.inputs.items())
            ],
            "products": names,
        }
        write_record(self._path, self._text)


def _products_of(path: Path) -> set[str]:
    """Return the products an earlier ``run.json`` lists; none if it is unreadable."""
    try:
        listed = json.loads(path.read_text(encoding="utf-8"))["products"]
    except (OSError, ValueError, KeyError, TypeError):
        return set()
    # Only what lies in the two folders of cutouts and differences, by plain names.
    return {
        name
        for name in listed
        if len(parts := Path(name).parts) == 2 and parts[0] in _FOLDERS
    }


def _now() -> str:
    return datetime.now(tz=UTC).isoformat(timespec="seconds").replace("+00:00", "Z")
