"""The zoom against signals whose baseband stream is known in closed form."""

import numpy as np
import pytest
from driftwatch.measure.zoom import BandRequest, Zoom
from hypothesis import given, settings
from hypothesis import strategies as st

RATES_AND_BANDS = [
    (48_000, (820.0, 980.0), 4.0, 1.0),
    (44_100, (290.0, 340.0), 1.0, 1.0),
    (8_192, (100.0, 130.0), 4.0, 1.0),
    (48_000, (4_985.0, 5_015.0), 20.0, 5.0),
    (44_100, (290.0, 340.0), 0.37, 0.37),
]


def tone(rate_hz: int, seconds: float, hz: float, amplitude: float = 1.0) -> np.ndarray:
    return (amplitude * np.cos(2 * np.pi * hz * np.arange(int(seconds * rate_hz)) / rate_hz + 0.3)).astype(np.float32)


def expected(zoom: Zoom, hz: float, count: int) -> np.ndarray:
    band = zoom.bands[0]
    t = np.arange(count) / band.rate_hz
    turned = (1j * hz / band.centre_hz) ** band.velocity_power
    return turned * np.exp(1j * (2 * np.pi * (hz - band.centre_hz) * t + 0.3))


@pytest.mark.parametrize(("power", "phase"), [(-1, 0.0), (0, 0.0), (1, 0.0), (0, 0.62), (0, 0.97)])
@pytest.mark.parametrize(("rate_hz", "search_hz", "window_s", "step_s"), RATES_AND_BANDS)
def test_a_tone_in_the_band_becomes_its_complex_exponential(rate_hz, search_hz, window_s, step_s, power, phase):
    """Tolerance: the 100 dB to which the band edge's impulse response has died away at either end of a block."""
    zoom = Zoom(rate_hz, [BandRequest(search_hz, window_s, step_s, power)], phase)
    hz = search_hz[0] + 0.71 * (search_hz[1] - search_hz[0])
    x = tone(rate_hz, 3 * zoom.hop / rate_hz, hz)
    (y,) = zoom.stream(x)
    run_in = 2 * zoom.edge // zoom.bands[0].decimation
    want = expected(zoom, hz, len(y))
    assert np.max(np.abs(y - want)[run_in:-run_in]) < 2e-5 * np.abs(want[0])


@pytest.mark.timeout(30)
def test_a_band_that_all_but_touches_half_the_rate_is_planned_at_once():
    """The edge of 0.01 Hz takes 640,000 samples: to compare every shape of a block would take hours."""
    zoom = Zoom(2_000, [BandRequest((800.0, 999.99), 4.0, 1.0)])
    (band,) = zoom.bands
    assert zoom.edge >= 640_000
    assert zoom.hop % band.decimation == zoom.edge % band.decimation == 0


@pytest.mark.parametrize("where", ["below", "above"])
def test_a_tone_outside_the_band_is_100_db_down(where):
    zoom = Zoom(48_000, [BandRequest((820.0, 980.0), 4.0, 1.0)])
    x = tone(48_000, 6, 600.0 if where == "below" else 1_200.0)
    (y,) = zoom.stream(x)
    run_in = 2 * zoom.edge // zoom.bands[0].decimation
    assert np.max(np.abs(y[run_in:-run_in])) < 1e-5


@pytest.mark.parametrize(("rate_hz", "search_hz", "window_s", "step_s"), RATES_AND_BANDS)
def test_windows_and_steps_are_exactly_as_asked_for(rate_hz, search_hz, window_s, step_s):
    (band,) = Zoom(rate_hz, [BandRequest(search_hz, window_s, step_s)]).bands
    assert band.window * band.decimation == round(window_s * rate_hz)
    assert band.step * band.decimation == round(step_s * rate_hz)


def test_bands_share_one_transform_without_changing_each_other():
    """The same band alone and among others gives the same stream within single precision."""
    requests = [BandRequest((820.0, 980.0), 4.0, 1.0), BandRequest((150.0, 210.0), 4.0, 1.0)]
    x = np.random.default_rng(0).standard_normal(48_000 * 6).astype(np.float32)
    alone, together = Zoom(48_000, requests[:1]), Zoom(48_000, requests)
    (y,), (z, _) = alone.stream(x), together.stream(x)
    t = np.arange(len(y)) / alone.bands[0].rate_hz
    same_centre = z[: len(y)] * np.exp(2j * np.pi * (together.bands[0].centre_hz - alone.bands[0].centre_hz) * t)
    assert alone.bands[0].decimation == together.bands[0].decimation
    inner = slice(200, -200)  # edges of the stream differ by the run-in
    assert np.sqrt(np.mean(np.abs(same_centre - y)[inner] ** 2)) < 1e-2 * np.sqrt(np.mean(np.abs(y) ** 2))


@given(
    rate_hz=st.sampled_from([8_000, 11_025, 44_100, 48_000, 51_200, 96_000]),
    low=st.floats(1.0, 3_000.0),
    share=st.floats(0.01, 0.5),
    window_s=st.floats(0.3, 60.0),
    overlap=st.integers(1, 8),
    phase=st.floats(0.0, 1.0, exclude_max=True),
)
@settings(max_examples=60, deadline=None)
def test_every_design_is_alias_free_and_on_one_grid(rate_hz, low, share, window_s, overlap, phase):
    """Block, hop and edge are whole numbers of baseband samples, and the slice holds the band."""
    high = min(low * (1 + share), 0.49 * rate_hz)
    zoom = Zoom(rate_hz, [BandRequest((low, high), window_s, window_s / overlap)], phase)
    (band,) = zoom.bands
    assert zoom.fft_length == zoom.hop + 2 * zoom.edge
    assert zoom.hop % band.decimation == zoom.edge % band.decimation == zoom.lead % band.decimation == 0
    assert zoom.block_of(0) == 0
    assert zoom.known_at(zoom.first_of(3)) == zoom.first_of(3) + zoom.edge
    assert zoom.known_at(zoom.first_of(3) + 1) == zoom.first_of(4) + zoom.edge
    assert band.rate_hz >= high - low
    assert abs(band.window * band.decimation - window_s * rate_hz) <= band.decimation


@pytest.mark.parametrize("search_hz", [(0.0, 10.0), (10.0, 5.0), (100.0, 4_000.0), (-5.0, 50.0)])
def test_a_band_outside_the_spectrum_is_refused(search_hz):
    with pytest.raises(ValueError, match="half the sample rate"):
        Zoom(8_000, [BandRequest(search_hz, 1.0, 1.0)])
