"""Which files belong to a night, and which frame of a group is the template."""

from dataclasses import replace
from pathlib import Path

import pytest

from latelight.config import NightConfig
from latelight.errors import SettingsError
from latelight.frames.headers import FrameHeader
from latelight.night import scan
from latelight.night.quality import Quality


def _config(folder, *patterns, template="earliest"):
    frames = tuple(str(folder / pattern) for pattern in patterns)
    night = {"frames": frames, "output": str(folder / "out")}
    return NightConfig.model_validate({"night": night, "pairs": {"template": template}})


def _touch(folder, *names):
    for name in names:
        (folder / name).parent.mkdir(parents=True, exist_ok=True)
        (folder / name).touch()


def test_files_are_sorted_and_named_once(tmp_path):
    _touch(tmp_path, "b.fits", "a.fits", "x/c.fits", "notes.txt")
    found = scan.find_files(_config(tmp_path, "*.fits", "a*", "**/*.fits"))
    assert [p.name for p in found] == ["a.fits", "b.fits", "c.fits"]


def test_products_of_an_earlier_run_are_no_frames(tmp_path):
    _touch(tmp_path, "a.fits", "out/candidates.fits", "out/cutouts/J1.fits")
    found = scan.find_files(_config(tmp_path, "**/*.fits"))
    assert [p.name for p in found] == ["a.fits"]


def test_a_pattern_without_files_is_a_fault_of_the_settings(tmp_path):
    with pytest.raises(
        SettingsError, match=r"night.frames: no file matches .*\*\.fits"
    ):
        scan.find_files(_config(tmp_path, "*.fits"))


HEADER = FrameHeader(
    name="a",
    path=Path("a.fits"),
    chip="",
    shape=(64, 64),
    mjd=60000.0,
    exposure_s=60.0,
    filter="r",
    field="A",
    gain=1.0,
    read_noise=5.0,
    saturation=6e4,
    zero_point=25.0,
    footprint=None,
    notes=(),
)


@pytest.fixture
def plan_of(monkeypatch, tmp_path):
    """Plan a night of frames given by name with made-up measurements."""

    def _plan(template, frames):
        headers = [
            replace(HEADER, name=n, path=Path(f"{n}.fits"), mjd=60000.0 + i, **words)
            for i, (n, (_, words)) in enumerate(frames.items())
        ]
        measured = {n: found for n, (found, _) in frames.items()}
        digests = {h.path: h.name for h in headers}
        monkeypatch.setattr(scan, "find_files", lambda _: ())
        monkeypatch.setattr(scan, "_read_all", lambda *_: (headers, [], digests))
        monkeypatch.setattr(scan, "_measure", lambda task: measured[task[0].name])
        return scan.plan_night(_config(tmp_path, "*", template=template), jobs=1).plan

    return _plan


def _quality(fwhm_px, sigma=10.0, arcsec=None):
    return Quality(fwhm_px, arcsec, sigma)


def test_the_sharpest_on_the_sky_is_the_template(plan_of):
    frames = {
        "a": (_quality(2.0, arcsec=1.6), {}),
        "b": (_quality(3.0, arcsec=1.2), {}),
    }
    (pair,) = plan_of("sharpest", frames).pairs
    assert (pair.template.name, pair.science.name) == ("b", "a")


def test_pixels_decide_when_a_frame_has_no_wcs(plan_of):
    frames = {"a": (_quality(2.0), {}), "b": (_quality(3.0, arcsec=1.2), {})}
    assert plan_of("sharpest", frames).pairs[0].template.name == "a"


def test_the_deepest_has_the_least_noise_on_one_flux_scale(plan_of):
    # b: twice the noise in counts, but a count is 2.5 times fainter (1 mag).
    frames = {
        "a": (_quality(3.0, 10.0), {"zero_point": 25.0}),
        "b": (_quality(3.0, 20.0), {"zero_point": 26.0}),
    }
    assert plan_of("deepest", frames).pairs[0].template.name == "b"


def test_exposure_times_make_the_scale_without_zero_points(plan_of):
    frames = {
        "a": (_quality(3.0, 10.0), {"zero_point": None, "exposure_s": 60.0}),
        "b": (_quality(3.0, 20.0), {"exposure_s": 180.0}),
    }
    assert plan_of("deepest", frames).pairs[0].template.name == "b"


def test_a_frame_that_cannot_be_measured_is_a_failed_row(plan_of):
    frames = {
        "a": ("no star stands out", {}),
        "b": (_quality(3.0), {}),
        "c": (_quality(2.0), {}),
    }
    plan = plan_of("sharpest", frames)
    assert [(p.template.name, p.science.name) for p in plan.pairs] == [("c", "b")]
    assert [(r.science, r.reason) for r in plan.failed] == [("a", "no star stands out")]
