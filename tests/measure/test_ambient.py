"""Ambient fits: batch invariance, degenerate windows, flags, units, and the bench's bars in small."""

from __future__ import annotations

import dataclasses

import numpy as np
import pytest
from driftwatch.measure.ambient import AmbientFit, fit
from driftwatch.records import REASONS
from numpy.typing import NDArray
from scipy import stats

from benchmarks import ambient as ambient_bench
from benchmarks.bars import FAMILY_REGULAR, Size, coverage_ok, spread_ok
from benchmarks.response import CHUNK, Case, velocity, windows

CASE = Case(900.0, 40.0, 4.0, 4000)


def fitted(case: Case, part: NDArray[np.complexfloating]) -> AmbientFit:
    band = case.band
    return fit(part, band.rate_hz, band.centre_hz, band.search_hz, band.velocity_power)


def simulated(case: Case, snr_db: float, count: int = CHUNK) -> NDArray[np.complex64]:
    return np.concatenate([part for (part,) in windows(case, (snr_db,), count)])


def mixed_windows() -> NDArray[np.complex64]:
    """Modes loud and faint, noise alone, a silent window and broken ones."""
    parts = [simulated(CASE, snr) for snr in (30.0, 6.0, -8.0, -40.0)]
    whole = np.concatenate(parts)[::2].copy()
    whole[3] = 0.0
    whole[10, 5] = np.nan
    whole[20, 5] = np.inf
    whole[30] *= np.float32(1e-22)
    whole[40] = 1.0
    return whole


@pytest.mark.parametrize("case", [CASE, Case(5000.0, 2000.0, 2.0, 12000)])
def test_a_windows_result_does_not_depend_on_its_batch(case: Case) -> None:
    """To the last bit, in random partitions of a shuffled batch: live and replay must agree. No tolerance."""
    whole = mixed_windows() if case is CASE else simulated(case, 10.0)
    together = fitted(case, whole)
    rng = np.random.default_rng(0)
    for _ in range(6):
        order = rng.permutation(len(whole))
        for part in np.split(order, np.sort(rng.integers(0, len(whole), rng.integers(1, 40)))):
            assert_same(fitted(case, whole[part]), together, part)


def assert_same(apart: AmbientFit, together: AmbientFit, rows: NDArray[np.intp]) -> None:
    for field in dataclasses.fields(AmbientFit):
        got, wanted = getattr(apart, field.name), getattr(together, field.name)
        if field.name == "reasons":
            assert got == tuple(wanted[row] for row in rows)
        else:
            np.testing.assert_array_equal(got, wanted[rows], err_msg=field.name)


def test_bars_of_the_bench_hold_in_small() -> None:
    """Spread, bias and coverage of the bench, 200 trials a cell, false-alarm probability 1e-6 over all."""
    rows = list(ambient_bench.run(Size(trials=200, family=FAMILY_REGULAR, full=False)))
    assert [row for row in rows if row.ok is False] == []


def test_a_window_short_against_the_memory_is_not_biased() -> None:
    """Q 2000 at 5 kHz in 5 s: the mean errors of ln fn and ln Q are under a fifth of a standard deviation.

    False-alarm probability 1e-6 (normal mean, two sides, two figures).
    """
    case = Case(5000.0, 2000.0, 5.0, 12000)
    got = fitted(case, simulated(case, 20.0, 200))
    allowed = 0.2 + stats.norm.isf(1e-6 / 4) / np.sqrt(len(got.ln_q))
    for error in (np.log(got.frequency_hz / case.frequency_hz), got.ln_q - np.log(case.q)):
        assert abs(np.mean(error)) < allowed * np.std(error)


def test_p_value_is_uniform_when_the_model_is_right() -> None:
    """The share of p-values under 0.05, 0.2 and 0.5 is no greater than it says; false-alarm probability 1e-6 each."""
    got = fitted(CASE, simulated(CASE, 10.0, 400))
    for level in (0.05, 0.2, 0.5):
        under = int(np.count_nonzero(got.fit_p < level))
        assert stats.binom.sf(under - 1, 400, level) > 1e-6
    assert np.count_nonzero(got.fit_p < 0.5) > 400 * 0.3  # and the test is not asleep


@pytest.mark.parametrize("what", ["a tone", "a second mode"])
def test_residuals_betray(what: str) -> None:
    """A tone of a tenth of the mode's variance, or a second mode 60 Hz away, is a misfit in every window."""
    band, length = CASE.band, CHUNK * int(CASE.window_s * CASE.rate_hz)
    rng = np.random.default_rng(0)
    if what == "a tone":
        more = 0.45 * np.cos(2 * np.pi * 930.0 * np.arange(length) / CASE.rate_hz)
    else:
        more = velocity(Case(960.0, 40.0, 4.0, 4000), length, rng)
    samples = velocity(CASE, length, rng) + more + 0.1 * rng.standard_normal(length)
    stream = CASE.zoom().stream(samples.astype(np.float32))[0][band.window :]
    got = fitted(CASE, stream[: stream.size // band.window * band.window].reshape(-1, band.window))
    assert all("misfit" in words for words in got.reasons)


def test_noise_holds_no_mode() -> None:
    """Fifty windows of noise: each says no_mode (law of the gain: 1e-5 expected to pass)."""
    rng = np.random.default_rng(0)
    noise = rng.standard_normal((50, 1000, 2)) @ np.array([1.0, 1j])
    assert all("no_mode" in words for words in fit(noise, 250.0, 900.0, (820.0, 980.0)).reasons)


@pytest.mark.parametrize(
    ("case", "word"),
    [
        (Case(900.0, 40.0, 4.0, 4000, widths=3.0, off=3.0), "band_edge"),
        (Case(900.0, 8.0, 8.0, 4000, widths=0.7), "too_wide"),
        (Case(900.0, 20000.0, 4.0, 4000, widths=300.0), "not_resolved"),
    ],
)
def test_what_the_band_or_the_window_cannot_show_is_named(case: Case, word: str) -> None:
    """A resonance at the edge, wider than half its band, or narrower than a line is usable in no window."""
    got = fitted(case, simulated(case, 25.0))
    assert sum(word in words for words in got.reasons) > 0.8 * CHUNK
    assert set().union(*got.reasons) <= set(REASONS)


def test_windows_that_hold_nothing_are_named_and_do_not_raise() -> None:
    """Silence is no mode of level 0; a sample that is no number spoils its own window only. Warnings are errors."""
    whole = simulated(CASE, 10.0)[:4].copy()
    whole[0], whole[1, 7], whole[2, 9] = 0.0, np.nan, np.inf
    got = fitted(CASE, whole)
    assert got.reasons[:3] == (("no_mode",), ("not_finite",), ("not_finite",))
    assert got.level[0] == 0.0
    assert np.all(np.isnan(got.frequency_hz[:3]))
    assert got.reasons[3] == ()
    assert fitted(CASE, whole[:0]).reasons == ()


def test_a_band_of_few_lines_is_not_resolved() -> None:
    """Fewer than eight lines in the band: no figure, a reason."""
    got = fit(np.ones((2, 1000), np.complex64), 250.0, 900.0, (899.0, 900.4))
    assert got.reasons == (("not_resolved",), ("not_resolved",))
    assert np.all(np.isnan(got.ln_q))


@pytest.mark.parametrize("factor", [1e-24, 1e-12, 1e12, 1e25])
def test_scale_of_the_signal_changes_its_level_alone(factor: float) -> None:
    """Over fifty decades, squares beyond single precision's range among them. Tolerance: single precision."""
    whole = simulated(CASE, 10.0)[:8]
    plain, scaled = fitted(CASE, whole), fitted(CASE, (whole * np.float32(factor)).astype(np.complex64))
    np.testing.assert_allclose(scaled.level, plain.level * factor, rtol=1e-5)
    np.testing.assert_allclose(scaled.ln_q, plain.ln_q, atol=1e-4)
    np.testing.assert_allclose(scaled.frequency_hz, plain.frequency_hz, rtol=1e-7)


@pytest.mark.parametrize("power", [-1, 0, 1])
def test_level_is_in_the_channels_own_unit(power: int) -> None:
    """A sine of amplitude 3 off the zoom's centre has level 3/sqrt(2), whatever it was converted to (1e-3: leakage)."""
    rate, centre, hz = 250.0, 900.0, 960.0
    t = np.arange(1000) / rate
    converted = 3.0 * (1j * hz / centre) ** power * np.exp(2j * np.pi * (hz - centre) * t)
    got = fit(converted[None].astype(np.complex64), rate, centre, (820.0, 980.0), power)
    assert got.level[0] == pytest.approx(3.0 / np.sqrt(2), rel=1e-3)


def test_signal_to_noise_ratio_is_that_simulated() -> None:
    """The mean of snr_db is within 0.2 dB of the truth at 6 dB (its standard error is 0.04 dB at 200 windows)."""
    got = fitted(CASE, simulated(CASE, 6.0, 200))
    assert np.mean(got.snr_db) == pytest.approx(6.0, abs=0.2)


def test_contradictory_arguments_are_refused() -> None:
    """Shape, rate and band are checked, and the error says what was expected."""
    good = np.zeros((1, 100), np.complex64)
    with pytest.raises(ValueError, match=r"expected \(windows, samples\)"):
        fit(good[0], 250.0, 900.0, (820.0, 980.0))
    with pytest.raises(ValueError, match="positive rate"):
        fit(good, 0.0, 900.0, (820.0, 980.0))
    with pytest.raises(ValueError, match="inside the baseband"):
        fit(good, 100.0, 900.0, (820.0, 980.0))
    with pytest.raises(ValueError, match="0 < low < high"):
        fit(good, 250.0, 900.0, (980.0, 820.0))


def blanks(windows_: NDArray[np.complex64], share: float, pieces: int) -> NDArray[np.bool_]:
    """Blank runs of equal length at random places, together about a share of each window."""
    count, length = windows_.shape
    run = int(share * length / pieces)
    begins = np.random.default_rng(0).integers(0, length - run, (count, pieces, 1))
    blanked = np.zeros((count, length), dtype=np.bool_)
    for begin in np.moveaxis(begins, 1, 0):
        np.put_along_axis(blanked, begin + np.arange(run), np.bool_(True), axis=1)
    return blanked


@pytest.mark.parametrize(("share", "pieces"), [(0.05, 1), (0.3, 1), (0.45, 2)])
def test_windows_with_blanked_samples_state_the_uncertainty_that_they_have(share: float, pieces: int) -> None:
    """Spread of the standardised errors and coverage, 600 windows; false-alarm probability 1e-6 over all 12 looks."""
    part = simulated(CASE, 10.0, 600)
    blanked = blanks(part, share, pieces)
    part[blanked] = 1e3  # whatever stood there
    band = CASE.band
    result = fit(part, band.rate_hz, band.centre_hz, band.search_hz, band.velocity_power, blanked)
    assert sum(not words for words in result.reasons) >= 594
    alpha = FAMILY_REGULAR / 12
    for error, std in (
        (np.log(result.frequency_hz / CASE.frequency_hz), result.ln_frequency_std),
        (result.ln_q - np.log(CASE.q), result.ln_q_std),
    ):
        assert spread_ok(error / std, 1.0, 1.1, alpha)
        assert coverage_ok(int(np.sum(np.abs(error) < 1.96 * std)), 600, 0.95, 0.95, alpha)


def test_a_window_without_blanks_is_the_same_with_and_without_saying_so() -> None:
    part, band = simulated(CASE, 10.0), CASE.band
    said = fit(part, band.rate_hz, band.centre_hz, band.search_hz, 0, np.zeros(part.shape, dtype=np.bool_))
    assert_same(said, fitted(CASE, part), np.arange(len(part)))


def test_blanks_of_another_shape_are_refused() -> None:
    part, band = simulated(CASE, 10.0), CASE.band
    with pytest.raises(ValueError, match="expected that of the windows"):
        fit(part, band.rate_hz, band.centre_hz, band.search_hz, 0, np.zeros((1, 3), dtype=np.bool_))
