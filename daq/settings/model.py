"""The shape of a lab file: which keys there are, of which kind, in which range.

One class for each section; the descriptions go into the JSON Schema that editors show. Only what can be
said of one value by itself is said here. What two places of the file have to do with each other, and
what must be there at all, is judged by ``checks``, so that every mistake is found in one go.
"""

from __future__ import annotations

import re
from datetime import datetime
from typing import Annotated, Any, Literal

from pydantic import BaseModel, BeforeValidator, ConfigDict, Discriminator, Field, Tag, WithJsonSchema
from pydantic_core import PydanticCustomError

from daq.yamlmarks import Plain, number, show, whole


def _wrong(value: object, wanted: str) -> PydanticCustomError:
    return PydanticCustomError("wrong", "got {got}, wanted {wanted}", {"got": show(value), "wanted": wanted})


def _number(value: Any) -> Any:
    found = number(value)
    if found is not None:
        return found
    wanted = "a number"
    if isinstance(value, Plain):
        if re.fullmatch(r"[+-]?[0-9]+,[0-9]+", value):
            wanted += " with a decimal point"
        elif re.fullmatch(r"0[0-9]+", value):
            wanted += f" without leading zeros ({value.lstrip('0') or '0'})"
        elif re.match(r"[+-]?[0-9.]+ *[a-zA-Z%]", value):
            wanted += " without a unit (the key names it)"
    elif isinstance(value, str) and number(Plain(value)) is not None:
        wanted += " without quotes"
    raise _wrong(value, wanted)


def _whole(value: Any) -> Any:
    found = whole(value)
    if found is None:
        raise _wrong(value, "a whole number")
    return found


def _flag(value: Any) -> Any:
    if isinstance(value, Plain) and value in ("true", "false"):
        return value == "true"
    raise _wrong(value, "true or false")


def _text(value: Any) -> Any:
    if isinstance(value, str) and value.strip():
        return value
    raise _wrong(value, "text")


def _matching(pattern: str, wanted: str) -> BeforeValidator:
    compiled = re.compile(pattern)

    def check(value: Any) -> Any:
        if isinstance(value, str) and compiled.fullmatch(value):
            return value
        raise _wrong(value, wanted)

    return BeforeValidator(check)


def _start(value: Any) -> Any:
    if isinstance(value, str):
        if value in ("first_scan", "entry", "load_channel"):
            return value
        try:
            if datetime.fromisoformat(value).utcoffset() is not None:
                return value
        except ValueError:
            pass
    raise _wrong(value, "first_scan, entry, load_channel or an instant with zone (2031-05-04T12:00:00+01:00)")


Number = Annotated[float, BeforeValidator(_number)]
Positive = Annotated[float, BeforeValidator(_number), Field(gt=0)]
Whole = Annotated[int, BeforeValidator(_whole)]
Flag = Annotated[bool, BeforeValidator(_flag)]
Text = Annotated[str, BeforeValidator(_text)]
NAME_PATTERN = r"[^\W_][\w.-]{0,63}"
Name = Annotated[
    str,
    _matching(NAME_PATTERN, "a name of letters, digits, _ - and . that begins with a letter or digit"),
    WithJsonSchema({"type": "string", "minLength": 1, "maxLength": 64}),
]
InstrumentName = Annotated[
    str,
    _matching(r"[^\W_][\w-]{0,63}", "a name of letters, digits, _ and - (no dots: INSTRUMENT.READING)"),
    WithJsonSchema({"type": "string", "minLength": 1, "maxLength": 64}),
]
ChannelName = Annotated[
    str,
    _matching(
        r"(?!time(_s)?$)[^\s,/|\"'+#\x00-\x1f]([^,/|\"'+#\x00-\x1f]{0,62}[^\s,/|\"'+#\x00-\x1f])?",
        "a name without commas, slashes, quotes, + # |, and not time or time_s",
    ),
    WithJsonSchema({"type": "string", "minLength": 1, "maxLength": 64}),
]
Source = Annotated[
    str,
    _matching(r"[^\W_][\w-]{0,63}\.[^\s.]+", "INSTRUMENT.READING"),
    WithJsonSchema({"type": "string", "pattern": r"^[^.]+\.[^.]+$"}),
]
Start = Annotated[str, BeforeValidator(_start)]
Url = Annotated[
    str,
    _matching(r"mqtts?://[^\s/@:?#]+(:[0-9]{1,5})?/?|mqtts?://\[[0-9A-Fa-f:.]+\](:[0-9]{1,5})?/?",
              "mqtt://HOST:PORT or mqtts://HOST:PORT (user and password have keys of their own)"),
    WithJsonSchema({"type": "string", "pattern": "^mqtts?://"}),
]  # fmt: skip


class Section(BaseModel):
    """What all sections share: no unknown keys, nothing changed later."""

    model_config = ConfigDict(extra="forbid", frozen=True, allow_inf_nan=False)


class Specimen(Section):
    id: Text = Field(description="The specimen's mark. Results are filed under it.")
    material: Text | None = None
    extensometer_length_mm: Positive | None = Field(default=None, description="Reference length of strain.")
    diameter_mm: Positive | None = Field(default=None, description="Diameter of a round section.")
    width_mm: Positive | None = Field(
        default=None, description="Width of a flat section (with thickness_mm)."
    )
    thickness_mm: Positive | None = None
    area_mm2: Positive | None = Field(
        default=None, description="Section, instead of diameter or width and thickness."
    )


class Band(Section):
    below_c: Positive = Field(description="How far the temperature may fall below temperature_c [K].")
    above_c: Positive = Field(description="How far it may rise above [K].")


class Junction(Section):
    fixed_c: Annotated[float, BeforeValidator(_number), Field(ge=-40, le=125)] | None = None
    channel: ChannelName | None = Field(
        default=None, description="A channel of this test that measures the junction."
    )


def _kind(value: Any) -> str:
    return "(keys)" if isinstance(value, (dict, BaseModel)) else "(word)"


Tolerance = Annotated[
    Annotated[Literal["iso204", "astm_e139"], Tag("(word)")] | Annotated[Band, Tag("(keys)")],
    Discriminator(_kind),
]
ColdJunction = Annotated[
    Annotated[Literal["by_instrument"], Tag("(word)")] | Annotated[Junction, Tag("(keys)")],
    Discriminator(_kind),
]
Pair = Annotated[list[Number], Field(min_length=2, max_length=2)]


class Conversion(Section):
    """From the instrument's number to the channel's unit, in this order of keys."""

    raw_unit: Literal["V", "mV", "uV", "ohm", "kohm"] | None = Field(
        default=None, description="Unit of a thermocouple's emf (default mV) or a resistance (default ohm)."
    )
    thermocouple: Literal["B", "E", "J", "K", "N", "R", "S", "T"] | None = None
    cold_junction: ColdJunction | None = Field(
        default=None, description="by_instrument, {fixed_c: 25} or {channel: NAME}; needed with thermocouple."
    )
    pt100: Flag | None = Field(default=None, description="Platinum resistance thermometer of IEC 60751.")
    points: Annotated[list[Pair], Field(min_length=2)] | None = Field(
        default=None,
        description="Calibration points [raw, value], raw rising; linear between, ends extended.",
    )
    polynomial: Annotated[list[Number], Field(min_length=1)] | None = Field(
        default=None, description="Factors of raw^0, raw^1, ..."
    )
    scale: Number | None = Field(default=None, description="Channel units per raw unit. Not 0.")
    offset: Number | None = Field(default=None, description="Added after scale, in the channel's unit.")


class Channel(Section):
    role: Literal[
        "strain", "extension", "specimen_temperature", "room_temperature", "cold_junction",
        "controller_output", "set_point", "force", "beam", "break_switch", "limit_switch",
        "levelling_motor", "other",
    ] = Field(description="What the channel measures.")  # fmt: skip
    side: Literal["A", "B"] | None = Field(default=None, description="Side of a two-sided extensometer.")
    unit: Text | None = Field(
        default=None,
        description="strain: m/m, percent, microstrain; extension: mm, um; temperatures: degC, degF, K;"
        " force: N, kN; default the first of each.",
    )
    source: Source | None = Field(
        default=None, description="INSTRUMENT.READING. Needed to run, not to replay."
    )
    conversion: Conversion | None = None
    rank: Annotated[int, BeforeValidator(_whole), Field(ge=0, le=99)] = Field(
        default=0,
        description="Of several strain sources of a side the least rank that has a reading is used.",
    )
    low: Number | None = Field(
        default=None, description="Less than this, in the channel's unit, is no reading."
    )
    high: Number | None = Field(
        default=None, description="More than this, in the channel's unit, is no reading."
    )
    travel_mm: Positive | None = Field(default=None, description="How far the extensometer can follow.")


class Limits(Section):
    milestones_percent: list[Positive] | None = Field(
        default=None, description="Strains whose times are reported."
    )
    strain_percent: Positive | None = Field(default=None, description="Alarm when creep strain passes this.")
    rate_percent_per_h: Positive | None = Field(
        default=None, description="Alarm when the strain rate passes this."
    )
    gradient_k: Positive | None = Field(default=None, description="Alarm when thermocouples differ by more.")
    excursion_min_s: Annotated[float, BeforeValidator(_number), Field(ge=0)] | None = Field(
        default=None, description="A temperature excursion shorter than this is none."
    )


class Sampling(Section):
    scan_every_s: Annotated[float, BeforeValidator(_number), Field(ge=0.01, le=86400)] | None = Field(
        default=None,
        description="Time between two scans of the frame. Default: the slowest poll_s of its instruments.",
    )


class Test(Section):
    """One specimen's run. With positions, keys at the frame hold for all that do not say otherwise."""

    __test__ = False  # not a test class, whatever a collector thinks of its name

    specimen: Specimen | None = None
    stress_mpa: Positive | None = Field(
        default=None, description="Initial stress; or mass_kg and lever_ratio."
    )
    mass_kg: Positive | None = Field(default=None, description="Mass hung on the lever.")
    lever_ratio: Positive | None = Field(default=None, description="1 for a mass hung directly.")
    gravity_m_per_s2: Annotated[float, BeforeValidator(_number), Field(ge=9.7, le=9.9)] | None = Field(
        default=None, description="Local gravity; default 9.80665."
    )
    sense: Literal["tension", "compression"] | None = None
    loading: Literal["constant_load", "constant_stress"] | None = None
    temperature_c: Annotated[float, BeforeValidator(_number), Field(gt=-273.15, le=3000)] | None = None
    tolerance: Tolerance | None = Field(
        default=None, description="iso204, astm_e139 or {below_c: 3, above_c: 3}."
    )
    activation_energy_kj_per_mol: Annotated[float, BeforeValidator(_number), Field(gt=0, le=2000)] | None = (
        None
    )
    stress_exponent: Annotated[float, BeforeValidator(_number), Field(gt=0, le=100)] | None = None
    expected_rupture_h: Positive | None = Field(default=None, description="An order of magnitude is enough.")
    starts: Start | None = Field(
        default=None,
        description="Full load: first_scan, entry, load_channel or an ISO 8601 instant with zone.",
    )
    limits: Limits | None = None
    false_share: Annotated[float, BeforeValidator(_number), Field(ge=1e-6, le=0.2)] | None = Field(
        default=None,
        description="Share of tests in which a false tertiary detection is accepted; default 0.005.",
    )
    channels: Annotated[dict[ChannelName, Channel], Field(min_length=1)] | None = None


class Frame(Test):
    sampling: Sampling | None = None
    positions: Annotated[dict[Name, Test], Field(min_length=1)] | None = Field(
        default=None, description="The specimens of a string, from the top; channels at the frame are shared."
    )


class Instrument(BaseModel):
    """An instrument; keys beside these are options of its driver."""

    model_config = ConfigDict(extra="allow", frozen=True, allow_inf_nan=False)

    driver: Text = Field(description="Name of the driver: textline, scpi, ...")
    port: Text | None = Field(
        default=None, description="/dev/serial/by-id/..., socket://HOST:PORT, or emulated (needs bench)."
    )
    poll_s: Annotated[float, BeforeValidator(_number), Field(ge=0.01, le=86400)] = Field(
        default=1.0, description="Time between two polls."
    )


class Broker(Section):
    url: Url = Field(description="mqtts://HOST:PORT; mqtt:// only for this machine.")
    embedded: Flag = Field(
        default=False, description="Start a broker inside the program (demonstration; loopback)."
    )
    user: Text | None = None
    password_file: Text | None = Field(default=None, description="File with the password, mode 0600.")
    ca_file: Text | None = Field(default=None, description="Certificates to trust instead of the system's.")
    cert_file: Text | None = Field(default=None, description="The program's own certificate, if asked for.")
    key_file: Text | None = Field(default=None, description="Its key, mode 0600.")
    protocol: Annotated[Literal["5", "3.1.1"], WithJsonSchema({"enum": [5, "5", "3.1.1"]})] = "5"
    client_id: Name | None = None


class Bench(Section):
    """Emulated instruments and what their frames go through; the emulation judges its own words."""

    speed: Annotated[float, BeforeValidator(_number), Field(ge=0.01, le=1e6)] = Field(
        default=1.0, description="Times real time; other than 1 only where every instrument is emulated."
    )
    seed: Annotated[int, BeforeValidator(_whole), Field(ge=0)] = 0
    rigs: dict[Name, dict[str, Any]] = Field(
        default_factory=dict, description="Rig -> scenario, in the words of the emulation."
    )
    instruments: dict[InstrumentName, dict[str, Any]] = Field(
        default_factory=dict, description="Emulated instrument -> protocol and what its readings are."
    )


class LabFile(Section):
    """A lab file of Upturn: one host, its instruments and frames."""

    site: Name = Field(description="Name of the site; first part of every MQTT topic.")
    journal: Text = Field(description="Folder of the record; relative to the folder of this file.")
    broker: Broker | None = None
    instruments: dict[InstrumentName, Instrument] = Field(default_factory=dict)
    frames: Annotated[dict[Name, Frame], Field(min_length=1)]
    bench: Bench | None = None
