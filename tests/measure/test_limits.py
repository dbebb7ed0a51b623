"""Bounds of an ambient window: limits, monotony and errors."""

from __future__ import annotations

import math

import pytest
from driftwatch.measure import limits


def test_whole_band_without_floor_is_the_bare_law() -> None:
    """With nothing cut off both band factors tend to one: by 4/(pi k) for frequency, 2 pi/(2k) ... for Q at k = 1e6."""
    assert limits.band_factors(1e6) == pytest.approx((1.0, 1.0), abs=1e-5)
    bare, wide = limits.ambient_law(900.0, 40.0, 4.0), limits.ambient_law(900.0, 40.0, 4.0, 1e6)
    assert wide.ln_q_std == pytest.approx(bare.ln_q_std, rel=1e-5)


def test_window_needed_gives_the_resolution_asked_for() -> None:
    """The law at the window that is said to be needed is what was asked for."""
    seconds = limits.window_needed(900.0, 40.0, 0.05, 12.0)
    assert limits.ambient_law(900.0, 40.0, seconds, 12.0).ln_q_std == pytest.approx(0.05, rel=1e-12)


def test_noise_and_ignorance_only_widen_the_bound() -> None:
    """A floor costs, an unknown floor costs more, a wider band helps."""
    clean = limits.ambient_bound(900.0, 40.0, 4.0, (820.0, 980.0))
    known = limits.ambient_bound(900.0, 40.0, 4.0, (820.0, 980.0), 6.0, floor_known=True)
    unknown = limits.ambient_bound(900.0, 40.0, 4.0, (820.0, 980.0), 6.0)
    narrow = limits.ambient_bound(900.0, 40.0, 4.0, (850.0, 950.0), 6.0)
    assert clean.ln_q_std < known.ln_q_std < unknown.ln_q_std < narrow.ln_q_std


def test_what_makes_no_sense_is_refused() -> None:
    """A band that is empty or has no width is named in the error."""
    with pytest.raises(ValueError, match="expected 0 < low < high"):
        limits.ambient_bound(900.0, 40.0, 4.0, (980.0, 820.0))
    with pytest.raises(ValueError, match="positive"):
        limits.band_factors(0.0)
    assert math.isfinite(limits.band_factors(1e-3)[1])
