"""The vocabulary of the stream and of the wire, against the names promised at the edges."""

import dataclasses
import datetime as dt
import enum
import typing
from fractions import Fraction

import pytest
from driftwatch.records import (
    KIND_OF,
    KINDS,
    NS,
    REASONS,
    Alert,
    AlertState,
    Baseline,
    Body,
    Change,
    CommandDone,
    Condition,
    CovariateValue,
    Decay,
    Envelope,
    Fault,
    FieldInfo,
    Health,
    Heartbeat,
    Level,
    Measurement,
    Method,
    Note,
    Origin,
    Phase,
    Priority,
    Run,
    TimeQuality,
    Tone,
    Track,
    TrackStatus,
    fields_of,
    parse_time,
    sample_time_ns,
    time_text,
    topic_of,
)
from hypothesis import given
from hypothesis import strategies as st

BODIES: dict[str, type] = dict(KINDS)

# Typed from the promise, by the names that stand on the wire and under --json; not derived from the code.
PROMISED = {
    "measurement": """
        channel mode method regime window_s first_sample samples frequency_hz frequency_std_hz q q_std q_low q_high
        frequency_q_correlation level level_unit snr_db fit_p usable reasons""",
    "track": """
        channel mode status regime frequency_hz frequency_std_hz q q_std q_low q_high frequency_q_correlation
        frequency_compensated_hz frequency_compensated_std_hz q_compensated q_compensated_std clock_std_ppm
        drift_per_day drift_std_per_day q_drift_per_day q_drift_std_per_day baseline last_measurement reason""",
    "alert": """
        alert occurrence condition channel mode quantity basis value value_std unit low high baseline confidence
        probability determinate since state previous_state priority by reason shelved_until because evidence""",
    "health": """
        channel fault phase incident since seconds first_sample lost_samples value limit unit detail""",
    "change": "channel mode quantity size size_std onset onset_low onset_high",
    "decay": "channel mode amplitude frequency_slope frequency_slope_std q_slope q_slope_std",
    "tone": "channel frequency_hz frequency_std_hz level level_unit order",
    "level": "channel window_s rms peak crest kurtosis band_hz unit",
    "covariate": "name value unit",
    "note": "by text",
    "baseline": "channel mode regime version",
    "command": "request by action target reason",
    "run": "config_sha256 version sources assumed",
}

# What the promise leaves open ("...") or what was added to it since: adding breaks nobody, renaming does.
ADDED = {
    "baseline": "frequency_hz frequency_std_hz q q_std readings from until",
    "run": "phase samples reason",
    "note": "handover",
    "command": "value unit outcome",
    "clock": "source rate_hz deviation_ppm deviation_std_ppm span_s offset_s offset_std_s",
}

ENVELOPE = "station run origin sequence previous time time_quality"  # and kind and schema, which the wire adds
HEARTBEAT = "uptime_s sample_age_s queue_fill worst_alert sequence unsaved unsaved_s"

ENUMERATIONS: dict[type[enum.StrEnum], str] = {
    Origin: "live replay simulated",
    TimeQuality: "synchronised free file assumed",
    Method: "ambient ringdown halfpower driven",
    TrackStatus: "searching tracking held lost",
    Condition: "band rate step time_left lost health level no_data daemon",
    AlertState: """
        normal unacknowledged acknowledged returned_unacknowledged latched_unacknowledged latched_acknowledged shelved
        suppressed_by_design out_of_service""",
    Priority: "low medium high urgent",
    Phase: "begin continue end",
}

FAULTS = "gap overflow clipping flat spikes loose mains gain_changed clock_step slow_consumer disk store device"

# What may be unknown; a figure that is missing here must always be known.
TIMES = {
    "track": "last_measurement",
    "alert": "since shelved_until",
    "health": "since",
    "change": "onset onset_low onset_high",
    "baseline": "from until",
}

MOMENT = 1_772_345_696_000_000_000  # 2026-03-01T06:14:56Z, by `date -u -d 2026-03-01T06:14:56Z +%s`


# ---------------------------------------------------------------------------------------------- fields


def test_there_is_a_record_for_every_kind_promised_and_none_besides() -> None:
    assert set(KINDS) == set(PROMISED) | {"clock"}
    assert set(KINDS.values()) == set(typing.get_args(Body))
    assert {KINDS[kind]: kind for kind in KINDS} == KIND_OF


@pytest.mark.parametrize("kind", PROMISED)
def test_a_record_has_exactly_the_fields_promised_in_edge_names(kind: str) -> None:
    expected = set(PROMISED[kind].split()) | set(ADDED.get(kind, "").split())
    names = [field.edge_name for field in fields_of(BODIES[kind])]
    assert set(names) == expected
    assert len(names) == len(expected)


@pytest.mark.parametrize("kind", [kind for kind in PROMISED if kind not in ADDED])
def test_the_fields_of_a_record_stand_in_the_order_promised(kind: str) -> None:
    assert [field.edge_name for field in fields_of(BODIES[kind])] == PROMISED[kind].split()


def test_the_envelope_and_the_heartbeat_have_the_fields_promised() -> None:
    assert [field.edge_name for field in fields_of(Envelope)] == ENVELOPE.split()
    beat = {field.edge_name for field in fields_of(Heartbeat)}
    assert beat == set(HEARTBEAT.split()) | {"station", "run", "origin", "time", "time_quality"}


def test_no_field_of_a_body_hides_one_of_the_envelope() -> None:
    """On the wire they share one object; `run` the kind has no field `run`."""
    envelope = {*ENVELOPE.split(), "kind", "schema"}
    for kind, body in BODIES.items():
        assert not envelope & {field.edge_name for field in fields_of(body)}, kind


@pytest.mark.parametrize("kind", PROMISED)
def test_times_and_nothing_else_lose_their_suffix_at_the_edge(kind: str) -> None:
    times = {field.edge_name for field in fields_of(BODIES[kind]) if field.is_time}
    assert times == set(TIMES.get(kind, "").split())
    for field in fields_of(BODIES[kind]):
        assert field.name == (f"{field.edge_name}_ns" if field.is_time else field.edge_name)
        assert not field.edge_name.endswith("_ns")


@pytest.mark.parametrize("kind", PROMISED)
def test_every_field_has_a_type_that_the_edges_can_carry(kind: str) -> None:
    for field in fields_of(BODIES[kind]):
        assert field.type in (float, int, str, bool, tuple) or issubclass(field.type, enum.StrEnum), field
        assert (field.item in (float, int, str)) == (field.type is tuple), field
        if field.is_time:
            assert field.type is int


def test_fields_tell_type_item_and_whether_a_value_may_be_unknown() -> None:
    track = {field.name: field for field in fields_of(Track)}
    assert track["last_measurement_ns"] == FieldInfo("last_measurement_ns", "last_measurement", int, None, True, True)
    assert track["q"] == FieldInfo("q", "q", float, None, True, False)
    assert track["status"] == FieldInfo("status", "status", TrackStatus, None, False, False)
    alert = {field.name: field for field in fields_of(Alert)}
    assert alert["because"] == FieldInfo("because", "because", tuple, int, False, False)
    assert alert["determinate"] == FieldInfo("determinate", "determinate", bool, None, False, False)
    level = {field.name: field for field in fields_of(Level)}
    assert level["band_hz"] == FieldInfo("band_hz", "band_hz", tuple, float, False, False)


def test_a_measurement_without_a_resonance_can_say_so() -> None:
    """Every figure of the resonance may be unknown; what was looked at may not."""
    optional = {field.edge_name for field in fields_of(Measurement) if field.optional}
    assert optional == {
        "regime", "frequency_hz", "frequency_std_hz", "q", "q_std", "q_low", "q_high", "frequency_q_correlation",
        "level", "snr_db", "fit_p",
    }  # fmt: skip


def test_records_cannot_be_changed_and_carry_no_dictionary() -> None:
    for body in (*BODIES.values(), Envelope, Heartbeat):
        assert "__slots__" in vars(body), body
        assert vars(body)["__dataclass_params__"].frozen, body
    with pytest.raises(dataclasses.FrozenInstanceError):
        Note("ann", "greased", handover=False).text = "oiled"  # type: ignore[misc]


@pytest.mark.parametrize("words", ENUMERATIONS, ids=lambda words: words.__name__)
def test_an_enumeration_holds_exactly_the_words_promised(words: type[enum.StrEnum]) -> None:
    assert [word.value for word in words] == ENUMERATIONS[words].split()


def test_the_faults_promised_exist() -> None:
    assert set(FAULTS.split()) <= {fault.value for fault in Fault}


def test_reasons_are_short_fixed_words_with_a_meaning() -> None:
    for word, meaning in REASONS.items():
        assert word.replace("_", "").isalpha()
        assert word.islower()
        assert len(meaning.split()) > 2


# ---------------------------------------------------------------------------------------------- topics


def envelope(body: Body) -> Envelope:
    return Envelope("line 3 infeed", "2f0c", Origin.REPLAY, 1, None, MOMENT, TimeQuality.FILE, body)


def an(body: type, **given: object) -> Body:
    """Build a record of which only the fields given matter."""
    values: dict[str, object] = {field.name: None for field in fields_of(body)}
    built: Body = body(**(values | given))
    return built


@pytest.mark.parametrize(
    ("body", "topic"),
    [
        (an(Measurement, channel="drive end", mode="housing rocking"), "measurement/drive_end/housing_rocking"),
        (an(Track, channel="drive end", mode="a.b-c"), "track/drive_end/a.b-c"),
        (an(Change, channel="x", mode="y z"), "change/x/y_z"),
        (an(Decay, channel="x", mode="y"), "decay/x/y"),
        (an(Baseline, channel="x", mode="y"), "baseline/x/y"),
        (an(Alert, alert="drive end/housing rocking/warning"), "alert/drive_end/housing_rocking/warning"),
        (an(Health, channel="drive end", fault=Fault.GAP), "health/drive_end"),
        (an(Health, channel=None, fault=Fault.DISK), "health"),
        (an(Tone, channel="drive end"), "tone/drive_end"),
        (an(Level, channel="drive end"), "level/drive_end"),
        (an(CovariateValue, name="oil temperature"), "covariate/oil_temperature"),
        (an(Note, by="ann", text="a b"), "note"),
        (an(CommandDone, by="ann"), "command"),
        (an(Run, phase=Phase.BEGIN), "run"),
    ],
)
def test_a_topic_is_the_kind_and_what_it_is_about_with_spaces_as_underlines(body: Body, topic: str) -> None:
    assert topic_of(body) == topic
    assert envelope(body).kind == topic.split("/", maxsplit=1)[0]


# ---------------------------------------------------------------------------------------------- times


@given(st.integers(0, 2**63 - 1))
def test_a_time_survives_its_text_to_the_nanosecond(time_ns: int) -> None:
    text = time_text(time_ns)
    assert text.endswith("Z")
    assert len(text) == len("2026-03-01T06:14:56.000000000Z")
    assert parse_time(text) == time_ns


@given(st.integers(0, 2**63 - 1), st.integers(0, 2**63 - 1))
def test_texts_sort_like_times(one: int, other: int) -> None:
    assert (time_text(one) < time_text(other)) == (one < other)


@given(
    st.datetimes(dt.datetime(1970, 1, 2), dt.datetime(2262, 1, 1)),
    st.integers(-14 * 60 + 1, 14 * 60),
)
def test_a_time_with_another_zone_is_the_same_moment(local: dt.datetime, minutes: int) -> None:
    moment = local.replace(tzinfo=dt.timezone(dt.timedelta(minutes=minutes)))
    since = moment - dt.datetime(1970, 1, 1, tzinfo=dt.UTC)
    assert parse_time(moment.isoformat()) == (since // dt.timedelta(microseconds=1)) * 1000


@pytest.mark.parametrize(
    ("text", "time_ns"),
    [
        ("2026-03-01T06:14:56Z", MOMENT),
        ("2026-03-01t06:14:56z", MOMENT),
        (" 2026-03-01 06:14:56Z\n", MOMENT),
        ("2026-03-01T06:14:56.5Z", MOMENT + NS // 2),
        ("2026-03-01T06:14:56.000000001Z", MOMENT + 1),
        ("2026-03-01T07:44:56+01:30", MOMENT),
        ("2026-02-28T22:14:56-08:00", MOMENT),
        ("1969-12-31T23:59:59.25Z", -750_000_000),
        ("1970-01-01T00:00:00Z", 0),
    ],
)
def test_times_as_people_and_programs_write_them_are_read(text: str, time_ns: int) -> None:
    assert parse_time(text) == time_ns


@pytest.mark.parametrize(
    "text",
    [
        "",
        "yesterday",
        "2026-03-01",
        "06:14:56Z",
        "2026-03-01T06:14:56",  # no zone: nobody knows when that was
        "2026-03-01T06:14Z",
        "2026-03-01T06:14:56.Z",
        "2026-03-01T06:14:56.0000000001Z",  # finer than can be kept
        "2026-03-01T06:14:56+0100",
        "2026-03-01T06:14:56Z and more",
        "2026-13-01T06:14:56Z",
        "2026-02-29T06:14:56Z",
        "2026-03-01T25:14:56Z",
        "2026-03-01T06:14:56+99:00",
        "２０２６-03-01T06:14:56Z",  # noqa: RUF001 - digits of another script are meant
        "2026-03-01T06:14:56.\u0665Z",  # a digit of another script
        "1772345696",
        "9999-01-01T00:00:00Z",  # no database keeps so many nanoseconds
        "0001-01-01T00:00:00Z",
        "2262-04-11T23:47:16.854775808Z",
        "0001-01-01T00:00:00+01:00",
    ],
)
def test_what_is_no_time_is_refused_naming_what_came(text: str) -> None:
    with pytest.raises(ValueError, match="is not a time") as caught:
        parse_time(text)
    assert repr(text) in str(caught.value)


# ---------------------------------------------------------------------------------------------- sample times


@pytest.mark.parametrize("rate", [8_000, 44_100, 48_000, 51_200, 96_000, 192_000])
@pytest.mark.parametrize("sample", [0, 1, 2**31 - 1, 2**31, 2**32 - 1, 2**32, 2**40 - 1, 2**40])
def test_the_time_of_a_sample_is_exact_to_the_nanosecond_below_it(sample: int, rate: int) -> None:
    """Against rational arithmetic; 2^40 samples are 265 days at 48 kHz."""
    time = sample_time_ns(MOMENT, sample, rate)
    exact = MOMENT + Fraction(sample, rate) * NS
    assert isinstance(time, int)
    assert 0 <= exact - time < 1


@given(st.integers(0, 2**40), st.integers(1, 2**20), st.integers(1, 1_000_000))
def test_later_samples_are_later_and_whole_seconds_are_whole(sample: int, more: int, rate: int) -> None:
    assert sample_time_ns(0, sample + more, rate) >= sample_time_ns(0, sample, rate)
    assert sample_time_ns(7, more * rate, rate) == 7 + more * NS
