"""What a configuration may expect is said in figures that agree with the published laws and with the zoom."""

from __future__ import annotations

import math

import pytest
from driftwatch.config import loads
from driftwatch.pipeline.outlook import assumed, expected_frequency, expected_qs, outlooks, remarks
from driftwatch.records import Method

BASE = """schema = 1
[[source]]
name = "s"
kind = "simulated"
rate_hz = 8192
[[channel]]
name = "a"
quantity = "acceleration"
scale = 98.1
[[mode]]
name = "m"
channel = "a"
search_hz = [820, 980]
window_s = 4.0
step_s = 1.0
[[mode.band]]
name = "w"
low = 890
high = 910
[[mode.band]]
name = "d"
quantity = "q"
low = 40
"""


def test_the_windows_are_the_zooms_and_the_latency_is_positive() -> None:
    (mode,) = outlooks(loads(BASE))
    assert (mode.rate_hz, mode.window_samples, mode.step_samples) == (8192, 4 * 8192, 8192)
    assert mode.latency_s is not None
    assert 0 < mode.latency_s < 4.0


def test_without_a_source_the_samples_are_unknown_and_the_bounds_are_not() -> None:
    source, rest = BASE.split("[[channel]]", 1)
    (mode,) = outlooks(loads("schema = 1\n[[channel]]" + rest))
    assert (mode.rate_hz, mode.window_samples, mode.step_samples, mode.latency_s) == (None, None, None, None)
    assert mode.resolutions == next(outlooks(loads(BASE))).resolutions
    assert source


def test_the_resolution_of_a_window_is_the_ambient_law_recomputed() -> None:
    """Au (2014): 900 Hz, Q 40, 4 s, a band of 160 Hz: k = 160 * 40 / 900."""
    ((one,),) = [mode.resolutions for mode in outlooks(loads(BASE))]
    k = 160 * 40 / 900
    b_f = 2 / math.pi * (math.atan(k) - k / (k**2 + 1))
    b_q = 2 / math.pi * (math.atan(k) + k / (k**2 + 1) - 2 * math.atan(k) ** 2 / k)
    assert (one.method, one.frequency_hz, one.q) == (Method.AMBIENT, 900.0, 40.0)
    assert one.frequency_std_hz == pytest.approx(900 * math.sqrt(1 / 80 / (2 * math.pi * 3600 * b_f)), rel=1e-12)
    assert one.q_std == pytest.approx(40 * math.sqrt(40 / (math.pi * 3600 * b_q)), rel=1e-12)


def test_the_resolution_of_a_decay_is_the_bound_of_a_full_one_where_the_window_holds_it() -> None:
    """cov(Q) = sqrt(8 g S)/A and cov(f) = cov(Q)/(2Q); 40 dB over noise of 160 Hz: S = (A/100)^2/160."""
    text = BASE.replace("window_s", 'methods = ["ringdown"]\nwindow_s')
    ((one,),) = [mode.resolutions for mode in outlooks(loads(text))]
    ln_q = math.sqrt(8 * math.pi * 900 / 40 / 160) / 100
    light = 2 * (1 / 80) ** 2  # what light damping neglects is of the order zeta^2
    assert one.method is Method.RINGDOWN
    assert one.q_std == pytest.approx(40 * ln_q, rel=light)
    assert one.frequency_std_hz == pytest.approx(900 * ln_q / 80, rel=light)


def test_the_resonance_supposed_comes_from_the_bands_or_from_the_search_band() -> None:
    mode = loads(BASE).mode[0]
    assert (expected_frequency(mode), expected_qs(mode)) == (900.0, [40.0])
    bare = loads(BASE.split("[[mode.band]]")[0]).mode[0]
    assert expected_frequency(bare) == 900.0
    (outlook,) = outlooks(loads(BASE.split("[[mode.band]]")[0]))
    assert outlook.q_range == (pytest.approx(900 / 80), 3600.0)
    assert all(11.25 < q < 3600 for q in expected_qs(bare))
    short = loads(BASE.split("[[mode.band]]")[0].replace("window_s = 4.0\nstep_s = 1.0", "window_s = 0.1")).mode[0]
    assert expected_qs(short) == [pytest.approx(math.sqrt(11.25 * 90))]


def test_nothing_is_assumed_or_remarked_where_the_file_says_it_all() -> None:
    config = loads(BASE)
    assert list(assumed(config)) == list(remarks(config)) == []


ASSUMED = [
    ("scale = 98.1\n", "", "fractions of full scale"),
    ("scale = 98.1", 'unit = "g"', "digital full scale is taken as 1 g"),
    ('quantity = "acceleration"\n', "", "taken as acceleration"),
    ('quantity = "acceleration"', 'quantity = "pressure"', "proportional to a velocity"),
    ("window_s = 4.0\n", "", "no window_s, so it is 4 s"),
]


@pytest.mark.parametrize(("old", "new", "words"), ASSUMED, ids=[row[2] for row in ASSUMED])
def test_what_is_taken_for_granted_is_said(old: str, new: str, words: str) -> None:
    (line,) = assumed(loads(BASE.replace(old, new)))
    assert words in line


MORE_MODE = '[[mode]]\nname = "n"\nchannel = "a"\nsearch_hz = [970, 1200]\n[[mode.band]]\nname = "w"\nlow = 990\n'
REMARKS = [
    (
        'kind = "simulated"\nrate_hz = 8192',
        'kind = "feed"',
        'run refuses this: source[1] "s" . kind: got "feed"',
    ),
    ('quantity = "acceleration"', 'quantity = "pressure"', "a microphone may record speech"),
    ("[[mode]]", '[[channel]]\nname = "b"\nunit = "V"\nscale = 1\n[[mode]]', 'channel "b": no mode is followed on it'),
    ("[[mode]]", "[channel.sensor]\nusable_hz = [10, 900]\n[[mode]]", "search_hz leaves what the sensor"),
    ("low = 890", "low = 800", "no frequency beyond 800 Hz can be found inside search_hz, 820 to 980 Hz"),
    ("low = 40", "low = 4", "tells Q from 11.2 to 3.6e+03; the limit 4 lies outside"),
    ("[[mode]]", MORE_MODE + "[[mode]]", "their search bands overlap"),
]


@pytest.mark.parametrize(("old", "new", "words"), REMARKS, ids=[row[2][:30] for row in REMARKS])
def test_what_is_worth_a_second_look_is_said(old: str, new: str, words: str) -> None:
    assert [line for line in remarks(loads(BASE.replace(old, new, 1))) if words in line]


def test_a_mode_without_bands_is_said_to_raise_no_alert() -> None:
    (line,) = remarks(loads(BASE.split("[[mode.band]]")[0]))
    assert line == 'mode "m" of "a": no band, so it is followed and raises no alert'


def test_a_search_band_too_narrow_for_the_rate_is_said_to_make_figures_late() -> None:
    text = BASE.split("[[mode.band]]")[0].replace("[820, 980]", "[900, 900.5]")
    text = text.replace("rate_hz = 8192", "rate_hz = 48000").replace("window_s = 4.0\nstep_s = 1.0", "window_s = 64.0")
    late, _ = remarks(loads(text))
    assert "a search band of 0.5 Hz is so narrow for 48000 samples a second that figures come" in late


@pytest.mark.parametrize(
    ("search", "words"),
    [
        ("[820, 4095.7]", "search_hz ends so near half the rate, 4096 Hz, that figures come"),
        ("[0.2, 980]", "search_hz begins so near 0 Hz that figures come"),
    ],
)
def test_a_search_band_without_room_beside_it_is_said_to_make_figures_late(search: str, words: str) -> None:
    text = BASE.split("[[mode.band]]")[0].replace("[820, 980]", search)
    late, _ = remarks(loads(text))
    assert words in late
