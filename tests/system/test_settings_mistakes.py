"""Every mistake in a lab file is named: place, got, wanted, all of them at once."""

from __future__ import annotations

from pathlib import Path

import pytest

from daq.settings import SettingsError, load, loads

HEAD = "site: s\njournal: j\n"
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


def complaints(text: str) -> list[str]:
    with pytest.raises(SettingsError) as caught:
        loads(text, "lab.yaml")
    return str(caught.value).split("\n")


def test_every_mistake_is_named_at_once_with_file_line_column_and_path(tmp_path: Path) -> None:
    """Nobody should have to run a command eight times."""
    path = tmp_path / "lab.yaml"
    path.write_text("""\
site: hall a
journal: j
frames:
  H1:
    specimen: {id: S-1, materal: alloy, diameter_mm: 6 mm}
    temperature_c: 010
    tolerance: iso205
    channels:
      left: {role: strian, side: A}
      mid: {role: specimen_temperature, high: 12:30:00}
bench: {seed: 1.5}
""")
    with pytest.raises(SettingsError) as caught:
        load(path)
    assert str(caught.value).split("\n") == [
        f"{path}:{line}"
        for line in (
            "1:7: site: got 'hall a', wanted a name of letters, digits, _ - and . that begins with a letter"
            " or digit",
            "4:3: frames.H1.stress_mpa: got no load, wanted stress_mpa, or mass_kg with lever_ratio",
            "5:25: frames.H1.specimen.materal: got an unknown key, wanted one of id, material,"
            " extensometer_length_mm, diameter_mm, width_mm, thickness_mm, area_mm2; did you mean material?",
            "5:54: frames.H1.specimen.diameter_mm: got '6 mm', wanted a number without a unit"
            " (the key names it)",
            "6:20: frames.H1.temperature_c: got '010', wanted a number without leading zeros (10)",
            "7:16: frames.H1.tolerance: got 'iso205', wanted iso204 or astm_e139 or a mapping of keys;"
            " did you mean iso204?",
            "9:20: frames.H1.channels.left.role: got 'strian', wanted one of strain, extension,"
            " specimen_temperature, room_temperature, cold_junction, controller_output, set_point, force,"
            " beam, break_switch, limit_switch, levelling_motor, other; did you mean strain?",
            "10:47: frames.H1.channels.mid.high: got '12:30:00', wanted a number",
            "11:1: bench: got no instrument with port: emulated, wanted one to play",
            "11:15: bench.seed: got '1.5', wanted a whole number",
        )
    ]
    assert [p.path for p in caught.value.problems][:2] == ["site", "frames.H1.stress_mpa"]


CHANNEL = "channels: {a: {role: strain}, b: {role: strain, side: B}, t: {role: specimen_temperature}}"
ONE = frame(CHANNEL)


@pytest.mark.parametrize(
    ("was", "becomes", "complaint"),
    [
        ("stress_mpa: 200", "stress_mpa: -200", "6:17: frames.H1.stress_mpa: got '-200', wanted more than 0"),
        ("stress_mpa: 200", "stress_mpa: '200'", "wanted a number without quotes"),
        ("stress_mpa: 200", "stress_mpa: 200,5", "wanted a number with a decimal point"),
        ("stress_mpa: 200", "stress_mpa: [200]", "got a list, wanted a number"),
        ("stress_mpa: 200", "stress_mpa: .nan", "got '.nan', wanted a number"),
        ("stress_mpa: 200", "stress_mpa: 200\n    mass_kg: 3", "got mass_kg beside stress_mpa"),
        (
            "stress_mpa: 200",
            "mass_kg: 3",
            "mass_kg: got no lever_ratio, wanted one (1 for a mass hung directly)",
        ),
        ("stress_mpa: 200", "lever_ratio: 3", "lever_ratio: got no mass_kg"),
        (
            "stress_mpa: 200",
            "mass_kg: 3\n    lever_ratio: 1",
            "specimen: got no section, wanted diameter_mm or",
        ),
        ("stress_mpa: 200\n", "stress_mpa: 200\n    Stress_MPa: 3\n", "did you mean stress_mpa?"),
        (
            "{id: S-1}",
            "{id: S-1, width_mm: 3}",
            "got width_mm, wanted diameter_mm, area_mm2, or width_mm and",
        ),
        ("{id: S-1}", "{material: x}", "specimen.id: got nothing, wanted id (The specimen's mark"),
        ("{id: S-1}", "S-1", "specimen: got 'S-1', wanted a mapping of keys to values"),
        ("{id: S-1}", "{id: ''}", "specimen.id: got '', wanted text"),
        ("temperature_c: 980", "temperature_c: -300", "wanted more than -273.15"),
        ("    temperature_c: 980\n", "", "temperature_c: got nothing, wanted the specified temperature"),
        ("    tolerance: iso204\n", "", "tolerance: got nothing, wanted iso204, astm_e139 or {below_c: 3"),
        ("temperature_c: 980", "temperature_c: 1150", "got iso204, which gives no band above 1100 degC"),
        ("tolerance: iso204", "tolerance: {below_c: 3}", "tolerance.above_c: got nothing, wanted above_c"),
        ("tolerance: iso204", "tolerance: [3, 3]", "got a list, wanted iso204 or astm_e139 or a mapping"),
        (CHANNEL, "channels: {}", "channels: got 0 entries, wanted at least 1"),
        ("    " + CHANNEL, "", "channels: got nothing, wanted at least one channel"),
        ("side: B", "side: B, rank: 1.5", "rank: got '1.5', wanted a whole number"),
        ("side: B", "side: A", "channels.b: got side A, rank 0, as has a; wanted another side or rank"),
        ("side: B", "side: 0", "side: got '0', wanted A or B"),
        ("strain, side: B", "extension, side: B", "specimen.extensometer_length_mm: got nothing, wanted the"),
        ("t: {role: specimen_temperature", "t: {role: force, side: A", "side: got it with role force"),
        (
            "specimen_temperature}",
            "specimen_temperature, low: 5, high: 5}",
            "high: got 5, wanted more than low",
        ),
        (
            "specimen_temperature}",
            "specimen_temperature, unit: mm}",
            "unit: got 'mm', wanted degC or degF or K",
        ),
        ("t: {", "time_s: {", "channels.time_s: got 'time_s', wanted a name without commas"),
        ("t: {", "a/b: {", "channels.a/b: got 'a/b', wanted a name without commas"),
        ("  H1:", "  host:", "frames.host: got 'host', wanted another name"),
        ("  H1:", "  H/1:", "frames.H/1: got 'H/1', wanted a name of letters"),
        ("journal: j", "journal: [j]", "2:10: journal: got a list, wanted text"),
        ("journal: j\n", "", "1:1: journal: got nothing, wanted journal (Folder of the record"),
        (
            "tolerance",
            "starts: soon\n    tolerance",
            "starts: got 'soon', wanted first_scan, entry, load_channel or",
        ),
        (
            "tolerance",
            "starts: 2031-05-04T12:00:00\n    tolerance",
            "wanted first_scan, entry, load_channel or an",
        ),
        (
            "tolerance",
            "starts: load_channel\n    tolerance",
            "got load_channel, wanted a channel with role force",
        ),
        ("tolerance", "activation_energy_kj_per_mol: 330000\n    tolerance", "wanted at most 2000"),
        (
            "tolerance",
            "limits: {gradient_k: 0}\n    tolerance",
            "limits.gradient_k: got '0', wanted more than 0",
        ),
        (
            "tolerance",
            "positions: {u: {channels: {a: {role: other}}}}\n    tolerance",
            "wanted one in each position",
        ),
        (
            "tolerance",
            "positions: {u: {channels: {a: {role: other}}}}\n    tolerance",
            "which the frame shares",
        ),
        (
            "tolerance",
            "positions: {u: {}}\n    tolerance",
            "positions.u.specimen: got nothing, wanted the specimen",
        ),
        (
            "site: s",
            "site: s\nbroker: {url: 'mqtt://h.example'}",
            "wanted mqtts:// (plain only for this machine",
        ),
        (
            "site: s",
            "site: s\nbroker: {url: 'mqtts://u:p@h.example'}",
            "url: got 'mqtts://u:p@h.example', wanted",
        ),
        ("site: s", "site: s\nbroker: {url: 'mqtts://h:99999'}", "wanted a port from 1 to 65535"),
        (
            "site: s",
            "site: s\nbroker: {url: 'http://h'}",
            "broker.url: got 'http://h', wanted mqtt://HOST:PORT",
        ),
        ("site: s", "site: s\nbroker: {url: 'mqtts://h', password_file: p}", "password_file: got no user"),
        ("site: s", "site: s\nbroker: {url: 'mqtts://h', embedded: yes}", "got 'yes', wanted true or false"),
        (
            "site: s",
            "site: s\nbroker: {url: 'mqtts://h', embedded: true}",
            "for the embedded broker, wanted mqtt:",
        ),
        ("site: s", "site: s\nbroker: {url: 'mqtts://h', protocol: 4}", "got '4', wanted 5 or 3.1.1"),
        ("site: s", "site: s\nbroker: {user: x}", "broker.url: got nothing, wanted url (mqtts://HOST:PORT"),
    ],
)
def test_a_mistake_is_named(was: str, becomes: str, complaint: str) -> None:
    """Place, got, wanted; and where a word is nearly right, the right one."""
    assert was in ONE
    found = complaints(ONE.replace(was, becomes, 1))
    assert any(complaint in line for line in found), "\n".join(found)
    assert all(line.startswith("lab.yaml:") for line in found)


@pytest.mark.parametrize(
    ("conversion", "complaint"),
    [
        ("thermocouple: Q", "thermocouple: got 'Q', wanted one of B, E, J, K, N, R, S, T"),
        ("thermocouple: K", "got no cold_junction, wanted by_instrument, {fixed_c: 25} or {channel: NAME}"),
        ("thermocouple: K, cold_junction: {}", "got both or neither, wanted either fixed_c or channel"),
        ("thermocouple: K, cold_junction: {fixed_c: 25, channel: c}", "got both or neither"),
        ("thermocouple: K, cold_junction: {fixed_c: 300}", "fixed_c: got '300', wanted at most 125"),
        (
            "thermocouple: K, cold_junction: instrument",
            "wanted by_instrument or a mapping of keys; did you mean",
        ),
        ("thermocouple: K, cold_junction: {channel: d}", "got 'd', wanted another channel of this test"),
        ("thermocouple: K, cold_junction: {channel: t}", "got 't', wanted another channel of this test"),
        ("thermocouple: K, cold_junction: {channel: a}", "got 'a' with role strain, wanted a temperature"),
        ("cold_junction: by_instrument", "cold_junction: got it without thermocouple"),
        ("pt100: true, thermocouple: K, cold_junction: by_instrument", "got pt100 beside thermocouple"),
        ("pt100: yes", "pt100: got 'yes', wanted true or false"),
        ("raw_unit: V", "got 'V', wanted thermocouple or pt100 beside it (else scale)"),
        ("pt100: true, raw_unit: V", "got 'V', wanted ohm or kohm with pt100"),
        ("scale: 0", "scale: got 0, wanted another number"),
        ("points: [[0, 1]]", "points: got 1 entries, wanted at least 2"),
        ("points: [[0, 1], [1]]", "points[1]: got 1 entries, wanted at least 2"),
        ("points: [[0, 1], [0.0, 2]]", "points[1]: got raw 0 after 0, wanted rising raw values"),
        ("polynomial: 3", "polynomial: got '3', wanted a list"),
        ("polynom: [3]", "got an unknown key, wanted one of raw_unit, thermocouple"),
    ],
)
def test_a_mistake_in_a_conversion_is_named(conversion: str, complaint: str) -> None:
    """A wrong cold junction is tens of kelvin."""
    body = f"channels: {{a: {{role: strain}}, t: {{role: room_temperature, conversion: {{{conversion}}}}}}}"
    found = complaints(frame(body))
    assert any(complaint in line for line in found), "\n".join(found)


BENCH = "bench: {speed: 60, instruments: {gauge: {protocol: text}}}\n"


@pytest.mark.parametrize(
    ("was", "becomes", "complaint"),
    [
        (
            "instruments: {gauge:",
            "instruments: {gage:",
            "got emulated, wanted bench.instruments.gauge; did you",
        ),
        (
            "instruments: {gauge:",
            "instruments: {gage:",
            "10:34: bench.instruments.gage: got 'gage', wanted an",
        ),
        ("speed: 60", "speed: fast", "bench.speed: got 'fast', wanted a number"),
        (
            "speed: 60",
            "pace: 60",
            "bench.pace: got an unknown key, wanted one of speed, seed, rigs, instruments",
        ),
    ],
)
def test_a_mistake_in_the_bench_is_named(was: str, becomes: str, complaint: str) -> None:
    """Every emulated instrument is played, and nothing else is."""
    gauge = GAUGE.replace("socket://127.0.0.1:4001", "emulated")
    text = frame("channels: {a: {role: strain, source: gauge.left}}", gauge + BENCH)
    lab = loads(text, "lab.yaml")
    assert lab.instruments[0].emulated
    assert lab.bench is not None
    assert (lab.bench.speed, lab.bench.spec["instruments"]) == (60.0, {"gauge": {"protocol": "text"}})
    found = complaints(text.replace(was, becomes, 1))
    assert any(complaint in line for line in found), "\n".join(found)


def test_one_mistake_is_named_once() -> None:
    """An empty value is no mapping either; the second complaint would only follow from the first."""
    assert complaints(frame("channels:\n  a: {role: strain}\n  b:")) == [
        "lab.yaml:11:7: frames.H1.channels.b: got nothing, wanted a value (or leave the key out)"
    ]


def test_a_thermocouple_measures_no_strain() -> None:
    """An emf in a strain channel is a slip of the pen."""
    body = "channels: {a: {role: strain, conversion: {thermocouple: K, cold_junction: by_instrument}}}"
    assert any("got it with role strain, wanted a temperature" in line for line in complaints(frame(body)))


@pytest.mark.parametrize(
    ("was", "becomes", "complaint"),
    [
        (
            "driver: textline",
            "driver: textlin",
            "5:13: instruments.gauge.driver: got 'textlin', wanted one of",
        ),
        ("driver: textline", "driver: textlin", "did you mean textline?"),
        ("left: 1", "left: x", "instruments.gauge.yields.left"),
        ('ask: "D"', "asks: D", "7:5: instruments.gauge.asks: is no option here"),
        ("  gauge:", "  ga.uge:", "(no dots: INSTRUMENT.READING)"),
        ("socket://127.0.0.1:4001", "emulated", "port: got emulated, wanted a section bench to play it"),
        ('ask: "D"', 'ask: "D"\n    poll_s: 0', "poll_s: got '0', wanted at least 0.01"),
        ("gauge.left", "gage.left", "got instrument 'gage', wanted one of gauge; did you mean gauge?"),
        ("gauge.left", "gauge.lift", "got reading 'lift', wanted one of left, right; did you mean left?"),
        ("gauge.left", "left", "source: got 'left', wanted INSTRUMENT.READING"),
        (HEAD, HEAD + "bench: {speed: 60}\n", "bench.speed: got 60 beside gauge with a real port, wanted 1"),
    ],
)
def test_a_mistake_in_an_instrument_is_named(was: str, becomes: str, complaint: str) -> None:
    """The driver judges its own options; their place is that in the file."""
    text = frame("channels: {a: {role: strain, source: gauge.left}}", GAUGE)
    assert was in text
    found = complaints(text.replace(was, becomes, 1))
    assert any(complaint in line for line in found), "\n".join(found)


def test_a_file_that_cannot_be_read_is_named(tmp_path: Path) -> None:
    """Missing, a folder, another encoding, no mapping."""
    with pytest.raises(SettingsError, match=r"none\.yaml: got No such file or directory, wanted a lab file"):
        load(tmp_path / "none.yaml")
    with pytest.raises(SettingsError, match="got Is a directory"):
        load(tmp_path)
    (tmp_path / "l.yaml").write_bytes("site: s\n# Pr\u00fcfstand\n".encode("latin-1"))
    with pytest.raises(SettingsError, match=r"l\.yaml:2:5: got byte 0xFC, wanted UTF-8"):
        load(tmp_path / "l.yaml")
    (tmp_path / "l.yaml").write_text("only words")
    with pytest.raises(SettingsError, match=r"l\.yaml:1:1: got no keys, wanted site, journal, frames"):
        load(tmp_path / "l.yaml")
