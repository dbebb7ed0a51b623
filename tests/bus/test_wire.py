"""The wire carries exactly the promised fields, nothing that is no JSON, and loses nothing."""

from __future__ import annotations

import json
import math
from collections.abc import Callable
from dataclasses import replace
from typing import Any

import pytest
from driftwatch.bus.errors import WireError
from driftwatch.bus.wire import (
    as_repeated,
    decode,
    decode_heartbeat,
    encode,
    encode_heartbeat,
    encode_json,
    is_repeated,
)
from driftwatch.records import Envelope, Heartbeat, Level, Measurement, Method, Origin, Priority, TimeQuality
from hypothesis import given, settings
from hypothesis import strategies as st

Make = Callable[..., Envelope]

HEADER = ["kind", "schema", "station", "run", "origin", "sequence", "previous", "time", "time_quality"]
PROMISED = {
    "measurement": "channel mode method regime window_s first_sample samples frequency_hz frequency_std_hz q q_std "
    "q_low q_high frequency_q_correlation level level_unit snr_db fit_p usable reasons",
    "track": "channel mode status regime frequency_hz frequency_std_hz q q_std q_low q_high frequency_q_correlation "
    "frequency_compensated_hz frequency_compensated_std_hz q_compensated q_compensated_std clock_std_ppm drift_per_day "
    "drift_std_per_day q_drift_per_day q_drift_std_per_day baseline last_measurement reason",
    "alert": "alert occurrence condition channel mode quantity basis value value_std unit low high baseline confidence "
    "probability determinate since state previous_state priority by reason shelved_until because evidence",
    "health": "channel fault phase incident since seconds first_sample lost_samples value limit unit detail",
    "change": "channel mode quantity size size_std onset onset_low onset_high",
    "decay": "channel mode amplitude frequency_slope frequency_slope_std q_slope q_slope_std",
    "tone": "channel frequency_hz frequency_std_hz level level_unit order",
    "level": "channel window_s rms peak crest kurtosis band_hz unit",
    "covariate": "name value unit",
    "note": "by text handover",
    "command": "request by action target reason value unit outcome",
}
"""The fields of each kind as the published description of the wire lists them."""


def _refuse(name: str) -> Any:
    raise AssertionError(f"{name} is no JSON")


def _strict(line: bytes) -> dict[str, Any]:
    found: dict[str, Any] = json.loads(line, parse_constant=_refuse)
    return found


@given(data=st.data())
@settings(deadline=None)
def test_the_fields_are_those_promised_in_their_order(any_envelope: st.SearchStrategy[Envelope], data: Any) -> None:
    envelope = data.draw(any_envelope)
    names = list(_strict(encode_json(envelope)))
    assert names[: len(HEADER)] == HEADER
    if envelope.kind in PROMISED:
        assert names[len(HEADER) :] == PROMISED[envelope.kind].split()
    if envelope.kind == "run":
        assert set(names) >= {"config_sha256", "version", "sources", "assumed"}


@given(data=st.data())
@settings(deadline=None, max_examples=300)
def test_decoding_gives_back_exactly_what_was_encoded(any_envelope: st.SearchStrategy[Envelope], data: Any) -> None:
    envelope = data.draw(any_envelope)
    line = encode_json(envelope)
    assert b"\n" not in line
    assert decode(_strict(line)) == envelope
    assert encode(envelope) == _strict(line)


@pytest.mark.parametrize("value", [math.nan, math.inf, -math.inf])
def test_a_number_that_is_not_finite_is_null(measurement: Make, value: float) -> None:
    message = _strict(encode_json(measurement(1, q=value, level=1.5)))
    assert message["q"] is None
    assert message["level"] == 1.5
    level = replace(measurement(1), body=Level("a", 1.0, value, 1.0, 1.0, 3.0, (value, 2.0), "m/s2"))
    message = _strict(encode_json(level))
    assert (message["rms"], message["band_hz"]) == (None, [None, 2.0])
    decoded = decode(message).body
    assert isinstance(decoded, Level)
    assert math.isnan(decoded.rms)


def test_an_example_stands_letter_for_letter(measurement: Make) -> None:
    envelope = measurement(7, reasons=("gap", "short"), frequency_hz=900.1, channel='a"b', usable=False)
    assert encode_json(envelope).decode() == (
        '{"kind":"measurement","schema":1,"station":"line 3","run":"5f0e8f0e-1111-4222-8333-123456789abc",'
        '"origin":"replay","sequence":7,"previous":6,"time":"2026-01-01T00:00:07.000000000Z","time_quality":"file",'
        '"channel":"a\\"b","mode":"rocking","method":"ambient","regime":null,"window_s":4.0,"first_sample":336000,'
        '"samples":192000,"frequency_hz":900.1,"frequency_std_hz":0.1234,"q":40.5,"q_std":1.5,"q_low":37.7,'
        '"q_high":43.5,"frequency_q_correlation":0.01,"level":0.125,"level_unit":"m/s2","snr_db":20.5,"fit_p":0.5,'
        '"usable":false,"reasons":["gap","short"]}'
    )


@pytest.mark.parametrize(
    ("change", "match"),
    [
        ({"kind": "wish"}, "kind 'wish' is unknown; expected one of measurement"),
        ({"schema": 2}, "schema 2 is unknown; expected 1"),
        ({"time": "yesterday"}, "measurement.time is 'yesterday'.*RFC 3339"),
        ({"method": "magic"}, "measurement.method is 'magic'"),
        ({"q": "high"}, "measurement.q is 'high': expected int or float"),
        ({"samples": 1.5}, "measurement.samples is 1.5: expected int"),
        ({"samples": True}, "measurement.samples is True: expected int"),
        ({"usable": None}, "measurement.usable is None: expected bool"),
        ({"reasons": "gap"}, "measurement.reasons is 'gap': expected list"),
        ({"mode": ...}, "measurement has no field 'mode'"),
    ],
    ids=str,
)
def test_what_is_no_record_is_refused_by_its_field(measurement: Make, change: dict[str, Any], match: str) -> None:
    message = {name: value for name, value in (encode(measurement(1)) | change).items() if value is not ...}
    with pytest.raises(WireError, match=match):
        decode(message)


def test_a_field_of_a_later_version_is_passed_over(measurement: Make) -> None:
    assert decode(encode(measurement(1)) | {"mood": "good"}) == measurement(1)


@pytest.mark.parametrize("worst", [None, Priority.URGENT])
def test_a_heartbeat_comes_back_equal(worst: Priority | None) -> None:
    beat = Heartbeat("line 3", "run", Origin.LIVE, 12, TimeQuality.FREE, 1.5, None, 0.25, worst, 7)
    message = _strict(encode_heartbeat(beat))
    assert message["kind"] == "heartbeat"
    assert set(message) >= {"uptime_s", "sample_age_s", "queue_fill", "worst_alert", "sequence"}
    assert decode_heartbeat(message) == beat
    with pytest.raises(WireError, match="kind 'level' is no heartbeat"):
        decode_heartbeat(message | {"kind": "level"})


def test_a_figure_keeps_all_its_digits(measurement: Make) -> None:
    body = decode(_strict(encode_json(measurement(1, q=0.1 + 0.2, method=Method.RINGDOWN)))).body
    assert isinstance(body, Measurement)
    assert body.q == 0.1 + 0.2


@given(data=st.data())
def test_a_repeated_record_differs_by_its_last_member_and_comes_back_equal(
    any_envelope: st.SearchStrategy[Envelope], data: st.DataObject
) -> None:
    envelope = data.draw(any_envelope)
    message = _strict(as_repeated(encode_json(envelope)))
    assert list(message.items()) == [*encode(envelope).items(), ("repeated", True)]
    assert is_repeated(message)
    assert not is_repeated(encode(envelope))
    assert decode(message) == envelope
