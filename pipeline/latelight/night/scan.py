"""Find a night's frames, read their headers, and plan the pairs."""

from __future__ import annotations

import glob
from collections.abc import Callable, Sequence
from dataclasses import dataclass
from pathlib import Path

import numpy as np

from latelight.config import NightConfig
from latelight.errors import FrameError, SettingsError
from latelight.frames.digest import file_digest
from latelight.frames.files import frame_stem
from latelight.frames.headers import FrameHeader, read_headers
from latelight.night.calibration import Calibration
from latelight.night.chain import load_frame
from latelight.night.engine import Lost, run_tasks
from latelight.night.pairing import Plan, failed_frame, plan_pairs, set_aside
from latelight.night.settings import TEMPLATE_CHOICES
from latelight.products.rows import PairRow
from latelight.registration.stars import detect_stars

__all__ = ["Night", "find_files", "plan_night"]


@dataclass(frozen=True, slots=True)
class Night:
    """A night that is ready to run.

    Attributes
    ----------
    headers : tuple of FrameHeader
        Frames that can be read, ordered by path and chip, without copies.
    plan : Plan
        Pairs, and everything that cannot run.
    digests : dict
        SHA-256 of every file that could be read.
    """

    headers: tuple[FrameHeader, ...]
    plan: Plan
    digests: dict[Path, str]


def plan_night(config: NightConfig, *, jobs: int) -> Night:
    """Read the headers of a night and choose a template for every frame.

    Parameters
    ----------
    config : NightConfig
        All settings.
    jobs : int
        Processes, where frames must be measured to choose a template.

    Raises
    ------
    SettingsError
        If no file matches, or the template named in the settings is unusable.
    """
    headers, failed, digests = _read_all(find_files(config), config)
    kept, copies = set_aside(headers, digests)
    templates = _given_templates(config, digests)
    kept, unmeasured, rank = _ranked(kept, config, jobs)
    plan = plan_pairs(kept, settings=config.pairs, rank=rank, templates=templates)
    every = (*failed, *copies, *unmeasured, *plan.failed)
    return Night(kept, Plan(plan.pairs, every, plan.remarks), digests)


def find_files(config: NightConfig) -> tuple[Path, ...]:
    """Return the files that match the globs, without those of the output folder.

    Raises
    ------
    SettingsError
        If there are none.
    """
    output = Path(config.night.output).resolve()
    found: set[Path] = set()
    for pattern in config.night.frames:
        for name in glob.glob(pattern, recursive=True):  # noqa: PTH207 - absolute
            path = Path(name)
            if path.is_file() and output not in path.resolve().parents:
                found.add(path)
    if not found:
        wanted = ", ".join(config.night.frames)
        fault = f"night.frames: no file matches {wanted}; correct the path or pattern"
        raise SettingsError(None, [fault])
    return tuple(sorted(found))


def _read_all(
    paths: Sequence[Path], config: NightConfig
) -> tuple[list[FrameHeader], list[PairRow], dict[Path, str]]:
    """Read every header; a file that cannot be read becomes a failed row."""
    headers: list[FrameHeader] = []
    failed: list[PairRow] = []
    digests: dict[Path, str] = {}
    for path in paths:
        try:
            digests[path] = file_digest(path)
            headers += read_headers(path, config.header)
        except FrameError as error:
            failed.append(_failed_file(path, error.reason))
    return headers, failed, digests


def _failed_file(path: Path, reason: str) -> PairRow:
    name = frame_stem(path)
    return PairRow(
        pair=name,
        field="",
        filter="",
        template="",
        science=name,
        mjd_template=None,
        mjd_science=None,
        status="failed",
        reason=f"{path.name}: {reason}",
    )


def _given_templates(
    config: NightConfig, digests: dict[Path, str]
) -> tuple[FrameHeader, ...]:
    """Return the frames of the template file that the settings name, if they do."""
    if config.pairs.template in TEMPLATE_CHOICES:
        return ()
    path = Path(config.pairs.template)
    try:
        digests[path] = file_digest(path)
        return read_headers(path, config.header)
    except FrameError as error:
        choices = ", ".join(TEMPLATE_CHOICES)
        fault = f"pairs.template: {error}; or write one of {choices}"
        raise SettingsError(None, [fault]) from None


@dataclass(frozen=True, slots=True)
class _Quality:
    """How sharp and how quiet a frame is: pixels, arcsec or None, and counts."""

    fwhm_px: float
    fwhm_arcsec: float | None
    sigma: float


def _ranked(
    headers: tuple[FrameHeader, ...], config: NightConfig, jobs: int
) -> tuple[
    tuple[FrameHeader, ...], tuple[PairRow, ...], Callable[[FrameHeader], float]
]:
    """Return the frames that can be ranked, the others' rows, and the rank."""
    if config.pairs.template not in ("sharpest", "deepest"):
        return headers, (), lambda header: header.mjd
    quality: dict[tuple[Path, str], _Quality] = {}
    failed: list[PairRow] = []
    tasks = [(header, config) for header in headers]
    for index, found in sorted(run_tasks(_measure, tasks, jobs=jobs), key=_first):
        header = headers[index]
        if isinstance(found, _Quality):
            quality[header.path, header.chip] = found
        else:
            reason = found.reason if isinstance(found, Lost) else found
            failed.append(failed_frame(header, reason))
    kept = tuple(h for h in headers if (h.path, h.chip) in quality)
    measured = [quality[h.path, h.chip] for h in kept]
    if config.pairs.template == "sharpest":
        scores = _widths(measured)
    else:
        scores = _noises(kept, measured)
    ranks = {(h.path, h.chip): s for h, s in zip(kept, scores, strict=True)}
    return kept, tuple(failed), lambda header: ranks[header.path, header.chip]


def _first(item: tuple[int, object]) -> int:
    return item[0]


def _measure(task: tuple[FrameHeader, NightConfig]) -> _Quality | str:
    """Measure a frame; return why it cannot be when so."""
    header, config = task
    try:
        frame = load_frame(header, config)
        fwhm = detect_stars(frame.plane, settings=config.registration).fwhm_px
    except Exception as error:
        return f"unusable as a frame of a pair: {error}"
    if not np.isfinite(fwhm):
        return "no star stands out: sharpness and depth are unknown"
    ny, nx = frame.plane.pixels.shape
    scale = Calibration(frame.wcs, None).scale(0.5 * (nx - 1), 0.5 * (ny - 1))
    good = frame.plane.mask == 0
    sigma = float(np.sqrt(np.median(frame.plane.variance[good])))
    return _Quality(fwhm, None if scale is None else fwhm * scale, sigma)


def _widths(quality: Sequence[_Quality]) -> list[float]:
    """Return the widths on the sky, or in pixels when a frame has no WCS."""
    widths = [q.fwhm_arcsec for q in quality if q.fwhm_arcsec is not None]
    return widths if len(widths) == len(quality) else [q.fwhm_px for q in quality]


def _noises(headers: Sequence[FrameHeader], quality: Sequence[_Quality]) -> list[float]:
    """Return the noise of a star's flux in each frame, on one flux scale.

    The noise of a point source on a bright sky goes as sigma times the width of
    the PSF.  The scale is that of the zero points, or where one is missing, that
    of the exposure times.
    """
    if all(h.zero_point is not None for h in headers):
        scales = [10.0 ** (-0.4 * (h.zero_point or 0.0)) for h in headers]
    else:
        scales = [1.0 / h.exposure_s for h in headers]
    return [q.sigma * q.fwhm_px * s for q, s in zip(quality, scales, strict=True)]
