"""Header words: what is read, what is assumed, what is refused."""

from pathlib import Path

import pytest
from astropy.io import fits

from latelight.errors import FrameError
from latelight.frames.settings import HeaderWords
from latelight.frames.words import parse_date, read_words

PATH = Path("a.fits")
WORDS = {"MJD-OBS": 60000.0, "EXPTIME": 120.0, "FILTER": "r"}


def words(changes=None, *, drop=(), primary=None, **settings):
    header = fits.Header(WORDS | (changes or {}))
    for word in drop:
        del header[word]
    headers = (header,) if primary is None else (header, fits.Header(primary))
    return read_words(PATH, headers, words=HeaderWords(**settings))


def refusal(*args, **kwargs):
    with pytest.raises(FrameError) as caught:
        words(*args, **kwargs)
    assert caught.value.path == PATH
    return caught.value.reason


class TestEpoch:
    def test_middle_of_the_exposure(self):
        assert words({"EXPTIME": 864.0}).mjd == pytest.approx(60000.005)

    @pytest.mark.parametrize(
        ("date", "mjd"),
        [
            ("2023-02-25", 60000.0),
            ("2023-02-25T06:00:00", 60000.25),
            ("2023-02-25T06:00:00.000Z", 60000.25),
            ("2023-02-24T23:00:00-0700", 60000.25),
            ("01/02/99", 51210.0),
        ],
    )
    def test_dates(self, date, mjd):
        assert parse_date(date) == pytest.approx(mjd, abs=1e-9)

    def test_date_obs_stands_in_and_is_noted(self):
        got = words({"DATE-OBS": "2023-02-25T12:00:00"}, drop=["MJD-OBS"])
        assert got.mjd == pytest.approx(60000.5 + 60 / 86400)
        assert any("epoch from DATE-OBS" in note for note in got.notes)

    def test_the_named_word_may_hold_a_date(self):
        got = words({"START": "2023-02-25T12:00:00"}, mjd="START")
        assert got.mjd == pytest.approx(60000.5 + 60 / 86400)

    def test_julian_dates_are_converted_and_noted(self):
        got = words({"JD": 2460000.75}, mjd="JD")
        assert got.mjd == pytest.approx(60000.25 + 60 / 86400)
        assert any("Julian date" in note for note in got.notes)

    def test_contradicting_dates_are_noted(self):
        got = words({"DATE-OBS": "2023-03-25T00:00:00"})
        assert got.mjd == pytest.approx(60000.0 + 60 / 86400)
        assert any("28.0 days apart" in note for note in got.notes)

    @pytest.mark.parametrize("value", [0.0, -5.0, 99999.0, "yesterday", True])
    def test_bad_epochs(self, value):
        assert "[header] mjd" in refusal({"MJD-OBS": value})

    def test_no_epoch_at_all(self):
        assert "nor DATE-OBS" in refusal(drop=["MJD-OBS"])

    def test_bad_date_obs_matters_only_when_needed(self):
        assert words({"DATE-OBS": "noon"}).mjd > 60000
        reason = refusal({"DATE-OBS": "noon"}, drop=["MJD-OBS"])
        assert "DATE-OBS must be a date" in reason
        assert "'noon'" in reason


class TestNumbers:
    @pytest.mark.parametrize(
        ("word", "value", "rule"),
        [
            ("EXPTIME", 0.0, "above 0, got 0"),
            ("EXPTIME", -3.0, "above 0, got -3"),
            ("GAIN", -1.5, "above 0, got -1.5"),
            ("GAIN", 0, "above 0, got 0"),
            ("GAIN", "low", "a finite number, got 'low'"),
            ("GAIN", True, "a finite number, got True"),
            ("RDNOISE", -0.1, "at least 0, got -0.1"),
            ("SATURATE", 0, "above 0"),
            ("MAGZERO", "n/a", "a finite number"),
            ("MAGZERO", "nan", "a finite number"),
        ],
    )
    def test_refused_with_word_rule_and_value(self, word, value, rule):
        reason = refusal({word: value})
        assert word in reason
        assert rule in reason
        assert "[header]" in reason

    def test_numbers_written_as_text_are_read(self):
        assert words({"GAIN": " 1.5 "}).gain == 1.5

    def test_absent_and_blank_words_are_unknown(self):
        got = words({"GAIN": "", "RDNOISE": None})
        assert (got.gain, got.read_noise, got.saturation) == (None, None, None)
        assert got.zero_point is None

    def test_an_empty_setting_ignores_the_word(self):
        assert words({"GAIN": -7.0}, gain="").gain is None

    def test_missing_exposure(self):
        assert "no word 'EXPTIME'" in refusal(drop=["EXPTIME"])


class TestNames:
    def test_missing_filter_and_its_cure(self):
        assert 'set it to ""' in refusal(drop=["FILTER"])
        assert words(drop=["FILTER"], filter="").filter == ""

    def test_field_is_optional(self):
        assert words().field == ""
        assert words({"OBJECT": 12}).field == "12"

    def test_own_words_come_before_the_primary(self):
        got = words({"OBJECT": "own"}, primary={"OBJECT": "other", "GAIN": 3.0})
        assert (got.field, got.gain) == ("own", 3.0)

    def test_unreadable_card(self):
        card = fits.Card.fromstring("GAIN    = 'unclosed string")
        header = fits.Header([*fits.Header(WORDS).cards, card])
        with pytest.raises(FrameError, match="GAIN"):
            read_words(PATH, (header,), words=HeaderWords())
