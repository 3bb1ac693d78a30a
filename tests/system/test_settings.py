"""The lab file: what it comes to, and every mistake with its place."""

from __future__ import annotations

import math
from pathlib import Path

import numpy as np
import pytest

from daq.core.convert import convert, prepare
from daq.core.rules import Loading, Role, TestRules, rules_from_json, rules_to_json
from daq.core.thermo import THERMOCOUPLES
from daq.recording import read
from daq.settings import Lab, SettingsError, load, loads, must_be_ready, ready_to_run
from daq.settings.build import band_k
from daq.settings.model import Channel, Conversion
from daq.settings.units import UNITS

CONFIG = Path(__file__).parents[2] / "config"
HEAD = "site: s\njournal: j\n"
LEAST = """\
site: hall-a
journal: var/hall-a
frames:
  H1:
    specimen: {id: S-1, material: alloy X, extensometer_length_mm: 25.0, diameter_mm: 6.0}
    stress_mpa: 200
    loading: constant_load
    temperature_c: 980
    tolerance: iso204
    activation_energy_kj_per_mol: 330
    stress_exponent: 5
    expected_rupture_h: 900
    starts: first_scan
    channels:
      left:  {role: strain, side: A}
      right: {role: strain, side: B}
      mid:   {role: specimen_temperature}
      room:  {role: room_temperature}
"""
"""The frozen least form of DESIGN section 8."""
GAUGE = """\
instruments:
  gauge:
    driver: textline
    port: socket://127.0.0.1:4001
    ask: "D"
    identity: {declared: gauge 1}
    yields: {left: 1, right: 2}
"""


def frame(body: str, extra: str = "") -> str:
    """A lab file with one frame of ``body``, beside what every frame must have."""
    lines = "".join(f"    {line}\n" for line in body.strip().split("\n"))
    return f"{HEAD}{extra}frames:\n  H1:\n    specimen: {{id: S-1}}\n    stress_mpa: 200\n    temperature_c: 980\n    tolerance: iso204\n{lines}"  # noqa: E501


def rules_of(text: str) -> TestRules:
    return loads(text, "lab.yaml").frames[0].tests[0]


# --- what a file comes to -------------------------------------------------------------------


def test_the_least_form_says_everything_that_a_replay_needs() -> None:
    """It is frozen: outside programs write it."""
    lab = loads(LEAST, "x/lab.yaml")
    assert (lab.site, lab.broker, lab.instruments, lab.bench, lab.text) == ("hall-a", None, (), None, LEAST)
    assert lab.journal == Path("x").absolute() / "var" / "hall-a"
    (h1,) = lab.frames
    assert (h1.name, h1.columns, h1.sources) == ("H1", ("left", "right", "mid", "room"), {})
    (rules,) = h1.tests
    assert (rules.site, rules.frame, rules.test) == ("hall-a", "H1", "H1")
    assert (rules.specimen.id, rules.specimen.material) == ("S-1", "alloy X")
    assert (rules.specimen.extensometer_length_mm, rules.specimen.diameter_mm) == (25.0, 6.0)
    assert (rules.stress_pa, rules.loading) == (200e6, Loading.CONSTANT_LOAD)
    assert (rules.set_point_c, rules.below_k, rules.above_k, rules.tolerance) == (980.0, 5.0, 5.0, "iso204")
    assert (rules.activation_energy_j_per_mol, rules.stress_exponent) == (330e3, 5.0)
    assert (rules.expected_rupture_h, rules.starts, rules.scan_every_s) == (900.0, "first_scan", None)
    assert [(c.name, c.role, c.side) for c in rules.channels] == [
        ("left", Role.STRAIN, "A"),
        ("right", Role.STRAIN, "B"),
        ("mid", Role.SPECIMEN_TEMPERATURE, ""),
        ("room", Role.ROOM_TEMPERATURE, ""),
    ]


@pytest.mark.parametrize("path", sorted(CONFIG.glob("*.yaml")), ids=lambda p: p.name)
def test_every_sample_loads_and_its_rules_go_through_the_record(path: Path) -> None:
    """A sample that does not load teaches nothing."""
    lab = load(path)
    assert lab.frames
    for f in lab.frames:
        for rules in f.tests:
            assert rules_from_json(rules_to_json(rules)) == rules
            prepare(rules, f.columns)


def test_the_minimal_sample_is_the_least_form() -> None:
    """Comments aside."""
    sample, least = load(CONFIG / "minimal.yaml"), loads(LEAST, CONFIG / "x.yaml")
    assert (sample.frames, sample.site, sample.journal) == (least.frames, least.site, least.journal)


# The bands of ISO 204 and of ASTM E139, both from memory.
@pytest.mark.parametrize(
    ("standard", "set_point_c", "k"),
    [
        ("iso204", 20.0, 3.0), ("iso204", 600.0, 3.0), ("iso204", 600.1, 4.0), ("iso204", 800.0, 4.0),
        ("iso204", 801.0, 5.0), ("iso204", 1000.0, 5.0), ("iso204", 1100.0, 6.0), ("iso204", 1101.0, None),
        ("astm_e139", 600.0, 2.0), ("astm_e139", 1000.0, 2.0), ("astm_e139", 1001.0, 3.0),
    ],
)  # fmt: skip
def test_the_band_is_chosen_by_the_specified_temperature(
    standard: str, set_point_c: float, k: float | None
) -> None:
    """603.1 degC is out at a set point of 600 while 803.9 is in at 800."""
    assert band_k(standard, set_point_c) == k


def test_stress_of_a_hung_mass_is_weight_times_lever_over_section() -> None:
    """30 kg x 9.81 m/s2 x 10 on a circle of 5 mm: 149.885 MPa (worked by hand)."""
    text = frame("channels: {a: {role: strain}}").replace(
        "stress_mpa: 200", "mass_kg: 30\n    lever_ratio: 10"
    )
    text = text.replace("temperature_c", "gravity_m_per_s2: 9.81\n    temperature_c")
    rules = rules_of(text.replace("{id: S-1}", "{id: S-1, diameter_mm: 5}"))
    assert rules.stress_pa == pytest.approx(30 * 9.81 * 10 / (math.pi * 2.5**2) * 1e6)
    assert rules.stress_pa == pytest.approx(149.885e6, rel=1e-5)
    flat = rules_of(text.replace("{id: S-1}", "{id: S-1, width_mm: 4, thickness_mm: 5}"))
    assert flat.stress_pa == pytest.approx(30 * 9.81 * 10 / 20 * 1e6)
    assert flat.specimen.area_mm2 == 20.0
    pressed = rules_of(text.replace("{id: S-1}", "{id: S-1, area_mm2: 20}\n    sense: compression"))
    assert pressed.stress_pa == pytest.approx(-30 * 9.81 * 10 / 20 * 1e6)


def test_positions_share_what_the_frame_says_and_may_say_otherwise() -> None:
    """A string: one mass, one furnace, sections and limits of their own."""
    (h7,) = load(CONFIG / "string.yaml").frames
    upper, lower = h7.tests
    assert (upper.test, lower.test, upper.frame) == ("H7/upper", "H7/lower", "H7")
    assert h7.columns == (
        "room", "beam", "upper/left", "upper/right", "upper/mid", "lower/left", "lower/right", "lower/mid",
    )  # fmt: skip
    assert [c.name for c in lower.channels] == ["room", "beam", "lower/left", "lower/right", "lower/mid"]
    assert lower.stress_pa is not None
    assert upper.stress_pa == pytest.approx(lower.stress_pa * 49 / 64)
    assert (upper.expected_rupture_h, lower.expected_rupture_h) == (20000.0, 6000.0)
    assert (upper.limits.strain, lower.limits.strain) == (None, 0.02)
    assert (upper.below_k, upper.tolerance) == (3.0, "stated")


def test_a_position_that_says_otherwise_is_believed() -> None:
    """The nearer word holds, load, band and limits alike."""
    own = "{id: S-2, diameter_mm: 4}, stress_mpa: 90, temperature_c: 700, limits: {gradient_k: 2}"
    position = f"a: {{specimen: {own}, channels: {{x: {{role: strain}}}}}}"
    text = frame(f"limits: {{strain_percent: 1}}\npositions:\n  {position}")
    rules = rules_of(text.replace("    specimen: {id: S-1}\n", "", 1))
    assert (rules.stress_pa, rules.set_point_c, rules.above_k) == (90e6, 700.0, 4.0)
    assert (rules.limits.gradient_k, rules.limits.strain) == (2.0, None), "a section is taken as a whole"


def test_units_are_folded_into_the_conversion(tmp_path: Path) -> None:
    """A recording in percent and degF comes out in m/m and degC, limits included."""
    text = frame("""
channels:
  s: {role: strain, unit: percent, low: -1, high: 30}
  e: {role: extension, side: B, unit: um, conversion: {scale: 2, offset: 10}}
  t: {role: specimen_temperature, unit: degF}
  k: {role: room_temperature, unit: K}
  f: {role: force, unit: kN}
""").replace("{id: S-1}", "{id: S-1, extensometer_length_mm: 25}")
    rules = rules_of(text)
    (tmp_path / "r.csv").write_text("time_s,s,e,t,k,f\n0,0.5,95,1796,294.15,5.5\n1,40,95,1796,294.15,5.5\n")
    (scans,) = read(tmp_path / "r.csv", "H1", ["s", "e", "t", "k", "f"])
    block = convert(rules, prepare(rules, scans.channels), scans, scans.utc_tick, scans.utc_tick / 1e4, 0)
    assert block.values[0] == pytest.approx([0.005, 0.2, 980.0, 21.0, 5500.0])
    assert np.isnan(block.strain_a).tolist() == [False, True]
    assert block.strain_b[0] == pytest.approx(0.008)


def test_a_conversion_names_its_columns_in_the_scans() -> None:
    """A position's cold junction may be its own or the frame's."""
    conversion = "{thermocouple: S, raw_unit: V, cold_junction: {channel: %s}}"
    tc = f"{{role: specimen_temperature, conversion: {conversion}}}"
    text = f"""{HEAD}frames:
  H1:
    stress_mpa: 9.5
    temperature_c: 700
    tolerance: astm_e139
    channels: {{cj: {{role: cold_junction, conversion: {{pt100: true}}}}}}
    positions:
      a:
        specimen: {{id: 010}}
        channels: {{t: {tc % "cj"}}}
      b:
        specimen: {{id: 1e5}}
        channels: {{t: {tc % "own"}, own: {{role: cold_junction}}}}
"""
    a, b = loads(text, "lab.yaml").frames[0].tests
    assert (a.specimen.id, b.specimen.id) == ("010", "1e5"), "a mark stays as it was written"
    found = {c.name: c.conversion for c in (*a.channels, *b.channels)}
    assert found["a/t"].cold_junction_channel == "cj"
    assert found["b/t"].cold_junction_channel == "b/own"
    assert found["b/t"].raw_scale == 1000.0
    assert found["cj"].pt100


def test_scans_come_as_often_as_the_slowest_instrument_unless_said() -> None:
    """A column would be empty half the time otherwise."""
    body = "channels: {a: {role: strain, source: gauge.left}}"
    assert loads(frame(body, GAUGE), "lab.yaml").frames[0].scan_every_s == 1.0
    slow = GAUGE + GAUGE.replace("instruments:\n", "").replace("gauge:", "slow:\n    poll_s: 5")
    two = "channels: {a: {role: strain, source: slow.left}, b: {role: other, source: gauge.left}}"
    assert loads(frame(two, slow), "lab.yaml").frames[0].scan_every_s == 5.0
    said = loads(frame(f"sampling: {{scan_every_s: 30}}\n{body}", GAUGE), "lab.yaml").frames[0]
    assert said.scan_every_s == 30.0
    assert said.tests[0].scan_every_s == 30.0
    assert said.sources == {"a": ("gauge", "left")}


def test_a_driver_gets_its_options_as_plain_values() -> None:
    """What is no key of ours is the driver's, its port among them."""
    text = frame(
        "channels: {a: {role: strain, source: gauge.left}}", GAUGE.replace('"D"', '"D"\n    frame: 7E1')
    )
    (gauge,) = loads(text, "lab.yaml").instruments
    assert (gauge.name, gauge.driver, gauge.port, gauge.poll_s) == (
        "gauge",
        "textline",
        "socket://127.0.0.1:4001",
        1.0,
    )
    assert not gauge.emulated
    assert gauge.options == {
        "port": "socket://127.0.0.1:4001",
        "ask": "D",
        "frame": "7E1",
        "identity": {"declared": "gauge 1"},
        "yields": {"left": 1, "right": 2},
    }


def test_the_broker_is_taken_apart() -> None:
    """Whoever connects needs host and port."""
    text = LEAST + "broker: {url: 'mqtts://b.example', user: u, password_file: /etc/p, protocol: 3.1.1}\n"
    broker = loads(text, "/x/lab.yaml").broker
    assert broker is not None
    assert (broker.host, broker.port, broker.tls, broker.user) == ("b.example", 8883, True, "u")
    assert (broker.password_file, broker.ca_file, broker.protocol) == (Path("/etc/p"), None, "3.1.1")
    local = loads(
        LEAST + "broker: {url: 'mqtt://[::1]:1999', embedded: true, protocol: 5}\n", "lab.yaml"
    ).broker
    assert local is not None
    assert (local.host, local.port, local.tls, local.embedded) == ("::1", 1999, False, True)


def test_a_byte_order_mark_and_windows_lines_do_not_matter(tmp_path: Path) -> None:
    """Editors add them."""
    (tmp_path / "l.yaml").write_bytes(b"\xef\xbb\xbf" + LEAST.replace("\n", "\r\n").encode())
    assert load(tmp_path / "l.yaml").frames == loads(LEAST, tmp_path / "l.yaml").frames


# --- ready to run ---------------------------------------------------------------------------


def live(tmp_path: Path, broker: str = "") -> Lab:
    return loads(
        frame("channels: {a: {role: strain, source: gauge.left}}", GAUGE + broker), tmp_path / "lab.yaml"
    )


def test_a_replay_needs_no_instruments_but_a_run_does() -> None:
    """What is missing is named where it should stand."""
    lab = loads(LEAST, "lab.yaml")
    assert [p.say("f") for p in ready_to_run(lab)][:2] == [
        "f:1:1: instruments: got nothing, wanted the instruments to read",
        "f:15:7: frames.H1.channels.left.source: got nothing, wanted INSTRUMENT.READING to run",
    ]
    with pytest.raises(SettingsError, match=r"lab\.yaml:18:7: frames\.H1\.channels\.room\.source"):
        must_be_ready(lab)


def test_a_secret_that_others_may_read_is_refused(tmp_path: Path) -> None:
    """The remedy is in the message."""
    broker = "broker: {url: 'mqtts://h', user: u, password_file: pw}\n"
    assert ["No such file" in p.message for p in ready_to_run(live(tmp_path, broker))] == [True]
    (tmp_path / "pw").write_text("x")
    (tmp_path / "pw").chmod(0o640)
    (problem,) = ready_to_run(live(tmp_path, broker))
    assert problem.path == "broker.password_file"
    assert "got mode 0640, wanted 0600" in problem.message
    (tmp_path / "pw").chmod(0o600)
    must_be_ready(live(tmp_path, broker))


# --- the models and the core speak of the same things -----------------------------------------


def test_the_file_knows_every_role_and_thermocouple_of_the_core() -> None:
    """The lists stand in two places: editors need them spelt out."""
    roles = Channel.model_json_schema()["properties"]["role"]["enum"]
    assert set(roles) == {role.value for role in Role}
    letters = Conversion.model_json_schema()["properties"]["thermocouple"]["anyOf"][0]["enum"]
    assert tuple(letters) == THERMOCOUPLES
    assert set(UNITS) <= set(roles)
