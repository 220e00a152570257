"""Flags against frames whose faults are known."""

from pathlib import Path

import numpy as np
import pytest
from scipy import ndimage

from latelight.frames.examine import examine
from latelight.frames.flags.saturation import estimate_saturation
from latelight.frames.settings import FrameSettings
from latelight.masks import MaskBit
from latelight.threads import n_threads, set_threads

GAIN, READ_NOISE, SKY, FULL = 2.0, 5.0, 200.0, 40000.0
SIGMA = np.sqrt(SKY / GAIN + READ_NOISE**2 / GAIN**2)


def stars(rng, n, *, fwhm, count, brightest=3e5):
    """Gaussian stars, integrated over pixels; returns counts and their places."""
    image = np.zeros((n, n))
    x, y = rng.uniform(8, n - 9, (2, count))
    # As many stars in every factor of brightness, from the noise up.
    flux = np.exp(rng.uniform(np.log(30.0), np.log(brightest), count))
    # The pixel widens the profile by its own variance.
    scale = np.sqrt((fwhm / 2.3548) ** 2 + 1.0 / 12.0)
    reach = int(6 * scale) + 1
    for sx, sy, f in zip(x, y, flux, strict=True):
        cols = np.arange(max(int(sx) - reach, 0), min(int(sx) + reach + 2, n))
        rows = np.arange(max(int(sy) - reach, 0), min(int(sy) + reach + 2, n))
        shape = np.outer(
            np.exp(-0.5 * ((rows - sy) / scale) ** 2),
            np.exp(-0.5 * ((cols - sx) / scale) ** 2),
        )
        image[np.ix_(rows, cols)] += f * shape / (2 * np.pi * scale**2)
    return image, x, y


def tracks(rng, n, count):
    """Cosmic rays: charge along short straight tracks, hardly diffused; counts."""
    image = np.zeros((n, n))
    for _ in range(count):
        electrons = int(np.exp(rng.uniform(np.log(400), np.log(2e4))))
        along = rng.uniform(-0.5, 0.5, electrons) * rng.exponential(3.0)
        angle = rng.uniform(0, np.pi)
        x = rng.uniform(6, n - 7) + along * np.cos(angle)
        y = rng.uniform(6, n - 7) + along * np.sin(angle)
        spread = rng.normal(0, 0.35, (2, electrons))
        cols = np.clip(np.rint(x + spread[0]).astype(int), 0, n - 1)
        rows = np.clip(np.rint(y + spread[1]).astype(int), 0, n - 1)
        np.add.at(image, (rows, cols), 1.0 / GAIN)
    return image


def expose(rng, light, *, extra=0.0, level=SKY):
    """Photon and read noise on light above a flat sky; counts."""
    electrons = rng.poisson(np.maximum(light + level, 0) * GAIN).astype(float)
    electrons += rng.normal(0, READ_NOISE, light.shape)
    return np.minimum(electrons / GAIN + extra, FULL).astype(np.float32)


def look(pixels, *, declared=None, saturation=FULL, **levels):
    return examine(
        Path("a.fits"),
        pixels,
        declared=declared,
        variance=None,
        gain=GAIN,
        read_noise=READ_NOISE,
        saturation=saturation,
        ceiling=np.inf,
        settings=FrameSettings(**levels),
    )


def flagged(seen, bit):
    return (seen.plane.mask & bit) != 0


class TestCosmicRays:
    @pytest.mark.parametrize(
        ("fwhm", "count", "found"),
        [
            # Completeness falls as stars come close to one pixel.
            (2.0, 150, 0.75),
            (2.5, 150, 0.85),
            (4.0, 150, 0.95),
            (3.0, 3000, 0.85),
        ],
    )
    def test_found_and_no_star_core_lost(self, rng, fwhm, count, found):
        n = 512
        light, x, y = stars(rng, n, fwhm=fwhm, count=count)
        rays = tracks(rng, n, 100)
        seen = look(expose(rng, light, extra=rays))
        hits = flagged(seen, MaskBit.COSMIC_RAY)
        sigma = np.sqrt((light + SKY) / GAIN + READ_NOISE**2 / GAIN**2)
        usable = (seen.plane.mask & ~np.uint16(MaskBit.COSMIC_RAY)) == 0
        strong = (rays > 10 * sigma) & usable
        assert hits[strong].mean() >= found
        # Away from cosmic rays no star core is touched, however bright.
        near = ndimage.maximum_filter(rays, 7) > 0.3 * SIGMA
        row, col = np.rint(y).astype(int), np.rint(x).astype(int)
        bright = (light[row, col] > 10 * sigma[row, col]) & ~near[row, col]
        assert bright.sum() > 30
        lost = ndimage.maximum_filter(hits, 3)[row, col] & bright
        assert lost.sum() <= 0.002 * bright.sum()
        # Blank sky: Gaussian tails at 4.5 sigma, four ways, give about one pixel.
        assert (hits & ~near).sum() <= 5

    def test_few_stars_among_many_rays(self, rng):
        n = 512
        light, x, y = stars(rng, n, fwhm=2.2, count=12)
        rays = tracks(rng, n, 400)
        seen = look(expose(rng, light, extra=rays))
        near = ndimage.maximum_filter(rays, 7) > 0.3 * SIGMA
        row, col = np.rint(y).astype(int), np.rint(x).astype(int)
        hits = flagged(seen, MaskBit.COSMIC_RAY)
        assert not (ndimage.maximum_filter(hits, 3)[row, col] & ~near[row, col]).any()
        assert hits[rays > 20 * SIGMA].mean() > 0.7

    def test_hit_pixels_are_filled_with_sky(self, rng):
        rays = tracks(rng, 256, 60)
        seen = look(expose(rng, np.zeros((256, 256)), extra=rays))
        strong = (rays > 20 * SIGMA) & flagged(seen, MaskBit.COSMIC_RAY)
        assert strong.sum() > 50
        # Of the neighbours that fill them some carry a little charge themselves.
        assert np.abs(seen.plane.pixels[strong] - SKY).max() < 8 * SIGMA


class TestSaturation:
    def bled(self, rng, n=300):
        light, _, _ = stars(rng, n, fwhm=4.0, count=50, brightest=1e4)
        yy, xx = np.mgrid[:n, :n]
        light += 5e5 * (1 + ((yy - 150) ** 2 + (xx - 140) ** 2) / 9.0) ** -2.5
        pixels = expose(rng, light)
        pixels[100:201, 139:142] = FULL
        pixels[201:206, 140] = 0.4 * FULL
        return pixels

    def test_saturated_pixels_and_their_rim(self, rng):
        pixels = self.bled(rng)
        seen = look(pixels, saturation_rim_px=2)
        full = pixels >= FULL
        disc = np.hypot(*np.mgrid[-2:3, -2:3]) <= 2
        expected = ndimage.binary_dilation(full, disc)
        assert np.array_equal(flagged(seen, MaskBit.SATURATED), expected)

    @pytest.mark.parametrize("readout", ["columns", "rows"])
    def test_bleed_runs_along_the_readout(self, rng, readout):
        pixels = self.bled(rng)
        if readout == "rows":
            pixels = np.ascontiguousarray(pixels.T)
        bleed = flagged(look(pixels, readout=readout), MaskBit.BLEED)
        if readout == "rows":
            bleed = bleed.T
        assert bleed[100:130, 140].all()
        assert bleed[170:206, 140].all()
        assert not bleed[:80].any()
        assert not bleed[:, 170:].any()

    def test_core_of_a_very_bright_star(self, rng):
        pixels = self.bled(rng)
        core = flagged(look(pixels, core_factor=2.0), MaskBit.SPIKE)
        width = (pixels[150] >= FULL).sum()
        assert core[150, 140 - width + 1 : 140 + width].all()
        assert not core[150, 200:].any()

    def test_level_from_pile_up(self, rng):
        pixels = self.bled(rng)
        seen = look(pixels, saturation=None)
        assert 0.97 * FULL < seen.saturation <= FULL
        assert any("pile-up" in note for note in seen.notes)

    def test_no_pile_up(self, rng):
        light, _, _ = stars(rng, 300, fwhm=4.0, count=80, brightest=1e5)
        pixels = expose(rng, light)
        kwargs = {"sky": SKY, "sigma": SIGMA}
        level, notes = estimate_saturation(pixels, ceiling=65535.0, **kwargs)
        assert level == 65535.0
        assert "data type" in notes[0]
        level, notes = estimate_saturation(pixels, ceiling=np.inf, **kwargs)
        assert level == np.inf
        assert "unknown" in notes[0]

    def test_saturated_star_is_filled_as_a_plateau(self, rng):
        seen = look(self.bled(rng))
        assert seen.plane.pixels[150, 140] > SKY + 100 * SIGMA
        assert seen.plane.pixels.max() < FULL


class TestColumns:
    @pytest.mark.parametrize(
        ("where", "offset"),
        [
            (np.s_[:, 100], 3.0),
            (np.s_[:, 100:102], -2.0),
            (np.s_[:, 200], 0.6),
            (np.s_[192:, 300], 8.0),
            (np.s_[150, :], 2.0),
            (np.s_[150, 64:256], -5.0),
        ],
    )
    def test_offset_lines(self, rng, where, offset):
        light, _, _ = stars(rng, 512, fwhm=4.0, count=300)
        pixels = expose(rng, light)
        pixels[where] += offset * SIGMA
        truth = np.zeros(pixels.shape, dtype=bool)
        truth[where] = True
        bad = flagged(look(pixels), MaskBit.BAD_COLUMN)
        assert bad[truth].mean() > 0.99
        assert (bad & ~truth).sum() <= 64

    def test_dead_column_at_the_level_of_the_sky(self, rng):
        pixels = expose(rng, np.zeros((512, 512)))
        pixels[:, 77] = SKY
        bad = flagged(look(pixels), MaskBit.BAD_COLUMN)
        assert bad[:, 77].all()
        assert bad.sum() == 512

    def test_dark_band_along_an_edge(self, rng):
        pixels = expose(rng, np.zeros((512, 512)))
        pixels[:7] = np.rint(rng.normal(100, 1.5, (7, 512)))
        bad = flagged(look(pixels, edge_px=0), MaskBit.BAD_COLUMN)
        assert bad[:7].all()
        assert not bad[12:].any()

    def test_stars_and_bright_trails_are_no_columns(self, rng):
        light, _, _ = stars(rng, 512, fwhm=3.0, count=1500)
        across = np.abs(np.arange(512) - 200.3)
        light += 100 * SIGMA * np.exp(-0.5 * (across / 1.5) ** 2)[None, :]
        assert flagged(look(expose(rng, light)), MaskBit.BAD_COLUMN).sum() <= 128

    def test_padding_has_no_data(self, rng):
        pixels = np.rint(expose(rng, np.zeros((300, 300))))
        pixels[:, 250:] = 0
        empty = flagged(look(pixels), MaskBit.NO_DATA)
        assert empty[1:-1, 251:-1].all()
        assert not empty[:, :250].any()


class TestTrails:
    def line(self, n, *, angle, offset, width=1.7):
        yy, xx = np.mgrid[:n, :n] - 0.5 * (n - 1)
        across = yy * np.cos(angle) - xx * np.sin(angle) - offset
        return np.exp(-0.5 * (across / width) ** 2), np.abs(across)

    @pytest.mark.parametrize("angle", [0.02, 0.6, 0.785, 1.55, 2.4])
    @pytest.mark.parametrize("height", [1.0, 5.0, 300.0])
    def test_found_at_any_angle_and_brightness(self, rng, angle, height):
        light, _, _ = stars(rng, 512, fwhm=4.0, count=250)
        shape, across = self.line(512, angle=angle, offset=30.0)
        trail = flagged(
            look(expose(rng, light + height * SIGMA * shape)), MaskBit.TRAIL
        )
        # Stars may cut a trail's ends off; its middle is covered, wings included.
        assert trail[across < 3.0].mean() > 0.9
        # A chance line of the noise is masked in one frame of a hundred.
        assert trail[across > 45.0].mean() < 0.02

    def test_faint_in_a_pixel_but_not_in_sum(self, rng):
        # 0.45 sigma along 512 pixels: matched S/N = 0.45 sqrt(512 sqrt(pi) 1.7) = 18.
        light, _, _ = stars(rng, 512, fwhm=4.0, count=100)
        shape, across = self.line(512, angle=0.5, offset=-40.0)
        trail = flagged(look(expose(rng, light + 0.45 * SIGMA * shape)), MaskBit.TRAIL)
        assert trail[across < 2.0].mean() > 0.9

    def test_a_chain_of_stars_is_none(self, rng):
        light, _, _ = stars(rng, 512, fwhm=4.0, count=100)
        yy, xx = np.mgrid[:512, :512]
        for place in np.linspace(20, 490, 24):
            distance = (yy - 0.5 * place - 100) ** 2 + (xx - place) ** 2
            light += 40 * SIGMA * np.exp(-0.5 * distance / 2.9)
        assert not flagged(look(expose(rng, light)), MaskBit.TRAIL).any()

    def test_none_in_a_field_of_stars(self, rng):
        light, _, _ = stars(rng, 512, fwhm=4.0, count=1000)
        assert not flagged(look(expose(rng, light)), MaskBit.TRAIL).any()

    @pytest.mark.parametrize("height", [0.5, 2.0])
    def test_echoes_are_none(self, rng, height):
        """A short arc, a long bent one and a wide band are left alone."""
        n = 512
        yy, xx = np.mgrid[:n, :n]
        radius = np.hypot(yy + 300.0, xx - 256.0)
        bent = np.exp(-0.5 * ((radius - 500) / 2.5) ** 2)
        straight, _ = self.line(n, angle=0.4, offset=60.0, width=2.5)
        short = straight * np.exp(-0.5 * ((xx - 256) / 40.0) ** 2)
        wide, _ = self.line(n, angle=1.0, offset=-90.0, width=12.0)
        light = height * SIGMA * (bent + short + 0.3 * wide)
        assert not flagged(look(expose(rng, light)), MaskBit.TRAIL).any()


@pytest.mark.parametrize("place", [150, 20])
def test_spikes_of_saturated_stars(rng, place):
    """Also of stars near the edge, half of whose spikes lie outside."""
    n = 512
    light, _, _ = stars(rng, n, fwhm=4.0, count=200, brightest=1e4)
    yy, xx = np.mgrid[:n, :n]
    on_spike = np.zeros((n, n), dtype=bool)
    for cy, cx in ((place, 160), (n - 1 - place, 300)):
        distance = np.hypot(yy - cy, xx - cx)
        light += 3e5 * (1 + distance**2 / 9.0) ** -2.5
        for angle in (np.pi / 4, 3 * np.pi / 4):
            across = (yy - cy) * np.cos(angle) - (xx - cx) * np.sin(angle)
            light += 20 * SIGMA * np.exp(-0.5 * across**2 - distance / 30.0)
            on_spike |= (np.abs(across) < 1) & (distance < 60)
    spike = flagged(look(expose(rng, light)), MaskBit.SPIKE)
    assert spike[on_spike].mean() > 0.9
    assert spike.mean() < 0.02


def test_declared_pixels_are_kept_apart(rng):
    declared = np.zeros((128, 128), dtype=bool)
    declared[20:30, 40] = True
    seen = look(expose(rng, np.zeros((128, 128))), declared=declared)
    assert np.array_equal(flagged(seen, MaskBit.DECLARED), declared)


def test_input_is_untouched_and_threads_change_nothing(rng):
    light, _, _ = stars(rng, 300, fwhm=3.0, count=200)
    pixels = expose(rng, light, extra=tracks(rng, 300, 50))
    before, threads = pixels.copy(), n_threads()
    try:
        planes = []
        for count in (1, 3):
            set_threads(count)
            planes.append(look(pixels).plane)
    finally:
        set_threads(threads)
    assert np.array_equal(pixels, before)
    for name in ("pixels", "variance", "mask"):
        assert np.array_equal(getattr(planes[0], name), getattr(planes[1], name))
