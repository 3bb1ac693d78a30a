"""Conversions against published tables, and the properties that the chain builds on."""

from __future__ import annotations

import dataclasses
import itertools

import numpy as np
import pytest
import thermocouple_its90 as its90
from hypothesis import given, settings
from hypothesis import strategies as st

from daq.core.block import Block
from daq.core.convert import convert, prepare
from daq.core.rules import ChannelRules, Conversion, Role, Specimen, TestRules
from daq.core.thermo import LOWEST_C, PT_A, PT_B, PT_C, THERMOCOUPLES, pt100_c, thermocouple
from daq.records import BAD, CoreError, Quality, ScansTaken

# ITS-90 reference tables, mV at a reference junction of 0 degC (NIST Monograph 175, identical to
# IEC 60584-1; figures as printed in the NIST table files).
TYPES = ("K", "N", "S", "R", "B", "J", "E", "T")
TABLE = """
-100 -3.554 -2.407 - - - -4.633 -5.237 -3.379
25 1.000 0.659 0.143 0.141 -0.002 1.277 1.495 0.992
100 4.096 2.774 0.646 0.647 0.033 5.269 6.319 4.279
200 8.138 5.913 1.441 1.469 0.178 10.779 13.421 9.288
300 12.209 9.341 2.323 2.401 0.431 16.327 21.036 14.862
400 16.397 12.974 3.259 3.408 0.787 21.848 28.946 20.872
500 20.644 16.748 4.233 4.471 1.242 27.393 37.005 -
600 24.905 20.613 5.239 5.583 1.792 33.102 45.093 -
700 29.129 24.527 6.275 6.743 2.431 39.132 53.112 -
800 33.275 28.455 7.345 7.950 3.154 45.494 61.017 -
900 37.326 32.371 8.449 9.205 3.957 51.877 68.787 -
1000 41.276 36.256 9.587 10.506 4.834 57.953 76.373 -
1100 45.119 40.087 10.757 11.850 5.780 63.792 - -
1200 48.838 43.846 11.951 13.228 6.786 69.553 - -
1300 52.410 47.513 13.159 14.629 7.848 - - -
1400 - - 14.373 16.040 8.956 - - -
1600 - - 16.777 18.849 11.263 - - -
"""
CASES = [
    (letter, float(t), float(mv))
    for t, *row in (line.split() for line in TABLE.split("\n") if line)
    for letter, mv in zip(TYPES, row, strict=True)
    if mv != "-"
]


def rules(*channels: ChannelRules, length: float | None = 25.0, stress_pa: float | None = 2e8) -> TestRules:
    return TestRules("hall", "H1", "H1", Specimen("S", extensometer_length_mm=length), channels, stress_pa)


def scans(names: tuple[str, ...], values: object, quality: object = None) -> ScansTaken:
    v = np.asarray(values, dtype=np.float64).reshape(-1, len(names))
    q = np.zeros(v.shape, np.uint8) if quality is None else np.asarray(quality, np.uint8).reshape(v.shape)
    ticks = np.arange(len(v), dtype=np.int64) * 10_000
    return ScansTaken("H1", names, "", ticks, ticks, v, q)


def converted(r: TestRules, values: object, quality: object = None) -> Block:
    taken = scans(tuple(c.name for c in r.channels), values, quality)
    return convert(r, prepare(r, taken.channels), taken, taken.utc_tick, taken.utc_tick / 1e4, 0)


def temperature(letter: str, mv: float, junction_c: float | None = None) -> float:
    """One emf through the whole step, as a test's channel would go."""
    v = Conversion(thermocouple=letter, cold_junction_c=junction_c)
    b = converted(rules(ChannelRules("t", Role.SPECIMEN_TEMPERATURE, conversion=v)), [mv])
    return float(b.values[0, 0])


# --- thermocouples and platinum against the tables ------------------------------------------


@pytest.mark.parametrize(("letter", "t", "mv"), [c for c in CASES if c[1] >= LOWEST_C[c[0]]])
def test_a_printed_emf_gives_its_temperature_to_the_rounding_of_the_table(
    letter: str, t: float, mv: float
) -> None:
    """ITS-90 tables, NIST Monograph 175: half a digit of the last place (0.0005 mV) over the slope."""
    half_digit_k = 0.0005 / its90.get(letter).seebeck(t)
    assert temperature(letter, mv) == pytest.approx(t, abs=half_digit_k * 1.02 + 1e-6)


@pytest.mark.parametrize("letter", TYPES)
def test_a_junction_at_25_degrees_adds_the_printed_emf(letter: str) -> None:
    """ITS-90 tables, NIST Monograph 175, row 25 degC."""
    printed = next(mv for kind, t, mv in CASES if kind == letter and t == 25.0)
    assert thermocouple(letter).junction_mv(np.array([25.0]))[0] == pytest.approx(printed, abs=0.0005)


@pytest.mark.parametrize(
    ("letter", "mv", "junction_c", "t", "digits"),
    [
        ("K", 4.096, 25.0, 124.30995, 5e-5),  # thermocouple-its90's page prints 124.3; digits computed
        ("K", 20.0, 23.5, 506.92468, 5e-5),  # computed from the ITS-90 functions
        ("K", 1.1, 23.0, 49.907928030, 5e-5),  # page of the package thermocouples_reference
        ("N", 20.0, 25.0, 601.16883, 5e-5),  # this and below computed from the ITS-90 functions
        ("S", 5.0, 25.0, 590.57245, 5e-5),
        ("R", 5.0, 25.0, 560.68467, 5e-5),
    ],
)
def test_a_cold_junction_is_compensated_by_its_emf(
    letter: str, mv: float, junction_c: float, t: float, digits: float
) -> None:
    """Adding degrees instead would put the first case at 125.0."""
    assert temperature(letter, mv, junction_c) == pytest.approx(t, abs=digits)


def test_the_junctions_emf_is_the_published_one() -> None:
    """K at 42 degC is 1.6938477049901346 mV (page of the package thermocouples_reference)."""
    assert thermocouple("K").junction_mv(np.array([42.0]))[0] == pytest.approx(1.6938477049901346, abs=1e-7)


@pytest.mark.parametrize("letter", THERMOCOUPLES)
def test_the_spline_inverts_the_reference_function(letter: str) -> None:
    """Judged by the library's own forward function at 4,000 places, ends included."""
    exact = its90.get(letter)
    low, high = LOWEST_C[letter], exact.range[1]
    t = np.append(np.random.default_rng(7).uniform(low, high, 4000), [low, high])
    emf = np.array([exact.emf(x) for x in t.tolist()])
    assert np.abs(thermocouple(letter).temperature_c(emf) - t).max() < 1e-5


@pytest.mark.parametrize("emf", [0.0, -0.002, -0.0026, 1e-5, 14.0, -1.0])
def test_type_b_is_refused_where_an_emf_means_two_temperatures(emf: float) -> None:
    """Its emf falls to a least value near 21 degC and is back at zero at 42 degC (NIST Monograph 175)."""
    v = Conversion(thermocouple="B")
    b = converted(rules(ChannelRules("t", Role.SPECIMEN_TEMPERATURE, conversion=v)), [emf])
    assert np.isnan(b.values[0, 0])
    assert b.quality[0, 0] == Quality.BAD_RANGE
    assert np.isnan(b.specimen_c[0])


@pytest.mark.parametrize("letter", THERMOCOUPLES)
def test_an_emf_outside_the_types_range_is_refused(letter: str) -> None:
    """A number from beyond the reference function would be invented."""
    high = its90.get(letter).emf(its90.get(letter).range[1])
    assert np.isnan(temperature(letter, high + 0.001))
    assert np.isnan(temperature(letter, -20.0))


# IEC 60751 table of a Pt100 (ohm); 25, 200 to 850 computed from its formula with coefficients from memory.
PT100 = [
    (-200, 18.520), (-150, 39.723), (-100, 60.256), (-50, 80.306), (0, 100.0), (25, 109.735), (100, 138.506),
    (200, 175.856), (300, 212.052), (400, 247.092), (600, 313.708), (850, 390.481),
]  # fmt: skip


@pytest.mark.parametrize(("t", "ohm"), PT100)
def test_a_printed_resistance_gives_its_temperature(t: float, ohm: float) -> None:
    """The figures are rounded to 0.001 ohm, and the curve rises at least 0.29 ohm/K."""
    assert pt100_c(np.array([ohm]))[0] == pytest.approx(t, abs=0.0005 / 0.29)


@pytest.mark.parametrize(("ohm", "t"), [(110.0, 25.6840), (200.0, 266.3482), (300.0, 557.6879)])
def test_resistances_between_the_table_rows(ohm: float, t: float) -> None:
    """Computed from IEC 60751's formula."""
    b = converted(
        rules(ChannelRules("t", Role.SPECIMEN_TEMPERATURE, conversion=Conversion(pt100=True))), [ohm]
    )
    assert b.values[0, 0] == pytest.approx(t, abs=5e-5)


def test_platinum_goes_round_over_its_whole_range() -> None:
    """The inverse of the forward formula, below zero too, where no closed form exists."""
    t = np.linspace(-199.9, 849.9, 3001)
    r = 100 * (1 + PT_A * t + PT_B * t**2 + np.where(t < 0, PT_C * (t - 100) * t**3, 0.0))
    assert np.abs(pt100_c(r) - t).max() < 1e-9
    assert np.isnan(pt100_c(np.array([18.0, 391.0, 0.0, np.nan]))).all()


# --- channels ----------------------------------------------------------------------------


def test_the_pieces_of_a_conversion_work_in_the_written_order() -> None:
    """Raw scale, points, polynomial, scale, offset: another order gives another number."""
    v = Conversion(
        raw_scale=10.0,
        points=((0.0, 0.0), (1.0, 2.0), (2.0, 8.0)),
        polynomial=(1.0, 0.0, 1.0),
        scale=3.0,
        offset=-1.0,
    )
    b = converted(rules(ChannelRules("x", Role.OTHER, conversion=v)), [0.05, 0.15, 0.3, -0.1])
    # points: 0.5 -> 1, 1.5 -> 5, 3 -> 14 and -1 -> -2 by extending the end pieces
    along = np.array([1.0, 5.0, 14.0, -2.0])
    assert b.values[:, 0] == pytest.approx((along**2 + 1) * 3 - 1)


def test_emf_in_volts_is_brought_to_millivolts() -> None:
    """A scanner answers in volts."""
    v = Conversion(thermocouple="K", raw_scale=1000.0, cold_junction_c=25.0)
    b = converted(rules(ChannelRules("t", Role.SPECIMEN_TEMPERATURE, conversion=v)), [4.096e-3])
    assert b.values[0, 0] == pytest.approx(124.30995, abs=5e-5)


def test_a_correction_table_follows_the_thermocouple() -> None:
    """A sensor's certificate states true temperature against indicated temperature."""
    v = Conversion(thermocouple="K", points=((0.0, 0.0), (1000.0, 998.0)))
    b = converted(rules(ChannelRules("t", Role.SPECIMEN_TEMPERATURE, conversion=v)), [24.905])
    assert b.values[0, 0] == pytest.approx(600.0 * 0.998, abs=0.02)


def test_a_cold_junction_channel_is_converted_before_it_is_used() -> None:
    """It may stand after the thermocouple in the file and have a conversion of its own."""
    hot = ChannelRules(
        "hot", Role.SPECIMEN_TEMPERATURE, conversion=Conversion(thermocouple="K", cold_junction_channel="cj")
    )
    cj = ChannelRules("cj", Role.COLD_JUNCTION, conversion=Conversion(pt100=True))
    b = converted(rules(hot, cj), [[4.096, 109.735]])
    assert b.values[0] == pytest.approx([124.30995, 25.0], abs=0.002)


@pytest.mark.parametrize("quality", [Quality.BAD_LINK, Quality.SUSPECT_STUCK, Quality.GOOD])
def test_a_temperature_is_worth_no_more_than_its_cold_junction(quality: Quality) -> None:
    """Without the junction the emf says nothing; with a doubtful one the temperature is doubtful."""
    hot = ChannelRules(
        "hot", Role.SPECIMEN_TEMPERATURE, conversion=Conversion(thermocouple="K", cold_junction_channel="cj")
    )
    cj = ChannelRules("cj", Role.COLD_JUNCTION)
    value = np.nan if quality >= BAD else 25.0
    b = converted(rules(hot, cj), [[4.096, value]], [[0, quality]])
    assert b.quality[0, 0] == quality
    assert np.isnan(b.values[0, 0]) == (quality >= BAD)


def test_a_temperature_beside_a_good_junction_is_judged_like_any_other() -> None:
    """Beyond the curve, or beyond the channel's own limits."""
    v = Conversion(thermocouple="K", cold_junction_channel="cj")
    hot = ChannelRules("hot", Role.SPECIMEN_TEMPERATURE, conversion=v, high=1000.0)
    b = converted(
        rules(hot, ChannelRules("cj", Role.COLD_JUNCTION)), [[80.0, 25.0], [45.0, 25.0], [4.096, 25.0]]
    )
    assert b.quality[:, 0].tolist() == [Quality.BAD_RANGE, Quality.BAD_RANGE, Quality.GOOD]
    assert np.isnan(b.specimen_c).tolist() == [True, True, False]


def test_strain_of_extension_refers_to_the_extensometers_length() -> None:
    """0.05 mm on 25 mm is 0.2 %; the channel itself stays in mm."""
    r = rules(ChannelRules("l", Role.EXTENSION, "A"), ChannelRules("r", Role.EXTENSION, "B"))
    b = converted(r, [[0.05, 0.06]])
    assert b.values[0] == pytest.approx([0.05, 0.06])
    assert b.strain_a[0] == pytest.approx(0.002, rel=1e-15)
    assert b.strain_b[0] == pytest.approx(0.0024, rel=1e-15)


def test_compression_counts_positive_in_the_sense_of_the_load() -> None:
    """A specimen that gets shorter under a negative stress creeps forward."""
    r = rules(ChannelRules("l", Role.EXTENSION, "A"), stress_pa=-1e8)
    assert converted(r, [-0.05]).strain_a[0] == pytest.approx(0.002)


def test_a_single_side_is_side_a_whatever_its_name() -> None:
    """Later steps look at A first; B is for the second of two."""
    b = converted(rules(ChannelRules("r", Role.STRAIN, "B")), [0.01])
    assert b.strain_a[0] == 0.01
    assert np.isnan(b.strain_b[0])


def test_the_best_source_by_rank_is_used_and_the_next_where_it_has_no_number() -> None:
    """A fine transducer ends at its limit, the beam goes on."""
    fine = ChannelRules("fine", Role.EXTENSION, "A", rank=0, high=2.0)
    beam = ChannelRules("beam", Role.STRAIN, "A", rank=1)
    b = converted(rules(beam, fine), [[0.02, 0.25], [0.09, 2.5], [0.1, np.nan]], [[0, 0], [0, 0], [0, 66]])
    assert b.strain_a == pytest.approx([0.01, 0.09, 0.1])
    assert b.quality[:, 1].tolist() == [Quality.GOOD, Quality.BAD_RANGE, Quality.BAD_GARBLED]


def test_the_specimen_temperature_is_the_mean_of_the_good_thermocouples() -> None:
    """A bad one takes no part; none at all is no temperature."""
    r = rules(*(ChannelRules(n, Role.SPECIMEN_TEMPERATURE, high=1200.0) for n in ("top", "mid", "bot")))
    b = converted(
        r, [[979.0, 980.0, 984.0], [979.0, 980.0, 5000.0], [np.nan] * 3], [[0] * 3, [0] * 3, [65] * 3]
    )
    assert b.specimen_c[:2] == pytest.approx([981.0, 979.5])
    assert np.isnan(b.specimen_c[2])


@pytest.mark.parametrize(
    ("value", "quality", "becomes"),
    [
        (np.nan, Quality.GOOD, Quality.BAD_NOT_A_NUMBER),
        (np.inf, Quality.GOOD, Quality.BAD_OVERLOAD),
        (-np.inf, Quality.SUSPECT_STUCK, Quality.BAD_OVERLOAD),
        (1e308, Quality.GOOD, Quality.BAD_RANGE),
        (5.0, Quality.BAD_OPEN_CIRCUIT, Quality.BAD_OPEN_CIRCUIT),
        (5.0, Quality.SUSPECT_SPIKE, Quality.SUSPECT_SPIKE),
        (5.0, Quality.GOOD, Quality.GOOD),
    ],
)
def test_a_value_is_missing_exactly_where_its_quality_is_bad(
    value: float, quality: Quality, becomes: Quality
) -> None:
    """No later step needs to look at both."""
    b = converted(rules(ChannelRules("x", Role.OTHER, conversion=Conversion(scale=1e9))), [value], [quality])
    assert b.quality[0, 0] == becomes
    assert np.isnan(b.values[0, 0]) == (becomes >= BAD)


# --- what cannot be prepared ------------------------------------------------------------------


@pytest.mark.parametrize(
    ("channel", "length", "complaint"),
    [
        (ChannelRules("y", Role.OTHER), 25.0, "channel y: got scans of x"),
        (ChannelRules("x", Role.EXTENSION), None, "extensometer_length_mm"),
        (ChannelRules("x", Role.OTHER, conversion=Conversion(thermocouple="Q")), 25.0, "'Q'"),
        (ChannelRules("x", Role.OTHER, conversion=Conversion(cold_junction_channel="x")), 25.0, "another"),
        (
            ChannelRules("x", Role.OTHER, conversion=Conversion(points=((1.0, 0.0), (1.0, 2.0)))),
            25.0,
            "rising",
        ),
        (ChannelRules("x", Role.OTHER, conversion=Conversion(points=((1.0, 0.0),))), 25.0, "two or more"),
    ],
)
def test_rules_that_promise_the_impossible_are_refused(
    channel: ChannelRules, length: float | None, complaint: str
) -> None:
    """Settings have checked all this; rules that come from a record may be anyone's."""
    with pytest.raises(CoreError, match=complaint):
        prepare(rules(channel, length=length), ("x",))


# --- independence of cuts -------------------------------------------------------------------


MIXED = rules(
    ChannelRules("l", Role.EXTENSION, "A", Conversion(polynomial=(0.1, 1.01, 1e-3)), high=40.0),
    ChannelRules("r", Role.STRAIN, "B", Conversion(points=((0.0, 0.0), (10.0, 0.1), (50.0, 0.6)))),
    ChannelRules(
        "k", Role.SPECIMEN_TEMPERATURE, "", Conversion(thermocouple="K", cold_junction_channel="cj")
    ),
    ChannelRules("n", Role.SPECIMEN_TEMPERATURE, "", Conversion(thermocouple="N", cold_junction_c=23.0)),
    ChannelRules("cj", Role.COLD_JUNCTION, conversion=Conversion(scale=0.5, offset=1.0)),
    ChannelRules("p", Role.ROOM_TEMPERATURE, conversion=Conversion(pt100=True)),
)


@settings(max_examples=40, deadline=None)
@given(seed=st.integers(0, 2**32 - 1), cuts=st.lists(st.integers(1, 299), max_size=8))
def test_rows_do_not_depend_on_how_the_scans_were_cut(seed: int, cuts: list[int]) -> None:
    """To the last bit: a live row of one scan and a replayed block of thousands are the same fact."""
    rng = np.random.default_rng(seed)
    values = rng.uniform(-5.0, 120.0, (300, 6))
    quality = np.where(rng.random((300, 6)) < 0.1, 66, 0)
    taken = scans(tuple(c.name for c in MIXED.channels), values, quality)
    plan = prepare(MIXED, taken.channels)
    t_s = taken.utc_tick / 1e4

    def run(start: int, stop: int) -> Block:
        return convert(
            MIXED, plan, taken.cut(start, stop), taken.utc_tick[start:stop], t_s[start:stop], start
        )

    whole = run(0, 300)
    edges = sorted({0, 300, *cuts})
    parts = [run(a, b) for a, b in itertools.pairwise(edges)] + [run(0, 1), run(299, 300)]
    for part in parts:
        rows = slice(part.first, part.first + len(part))
        for f in dataclasses.fields(Block):
            if f.name != "first":
                a, b = getattr(part, f.name), getattr(whole, f.name)[rows]
                assert np.ascontiguousarray(a).tobytes() == np.ascontiguousarray(b).tobytes(), f.name


def test_columns_are_found_by_name_and_others_left_alone() -> None:
    """A frame's scans hold the channels of all its positions."""
    r = rules(ChannelRules("room", Role.ROOM_TEMPERATURE), ChannelRules("top/left", Role.STRAIN, "A"))
    taken = scans(("bottom/left", "top/left", "room"), [[0.5, 0.01, 21.0]])
    b = convert(r, prepare(r, taken.channels), taken, taken.utc_tick, taken.utc_tick / 1e4, 7)
    assert b.first == 7
    assert (b.strain_a[0], b.room_c[0]) == (0.01, 21.0)
    assert b.values.tolist() == [[21.0, 0.01]]
