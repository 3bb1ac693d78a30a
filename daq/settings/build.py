"""From a lab file without mistakes to frozen settings: units, defaults, and what positions share."""

from __future__ import annotations

from collections.abc import Iterator, Mapping
from pathlib import Path
from typing import TYPE_CHECKING, Any, Final, TypeVar

from daq.core.rules import ChannelRules, Conversion, Limits, Loading, Role, Specimen, TestRules
from daq.settings import model
from daq.settings.checks import EMULATED
from daq.settings.lab import Bench, Frame, Instrument, Lab
from daq.settings.units import RAW, UNITS
from daq.yamlmarks import resolve

if TYPE_CHECKING:
    from daq.publish.access import BrokerSettings

STANDARD_GRAVITY: Final = 9.80665
"""m/s2, CGPM 1901."""
DEFAULT_SCAN_S: Final = 10.0
ISO204_BANDS: Final = ((600.0, 3.0), (800.0, 4.0), (1000.0, 5.0), (1100.0, 6.0))
"""ISO 204, permitted deviation [K] up to and including a specified temperature [degC] (from memory)."""
ASTM_E139_BANDS: Final = ((1000.0, 2.0), (float("inf"), 3.0))
"""ASTM E139, the same (from memory)."""
SIGN: Final = {"tension": 1.0, "compression": -1.0}
FALSE_SHARE: Final = 1.0 / 200.0
NOT_OPTIONS: Final = ("driver", "poll_s")

T = TypeVar("T")


def band_k(tolerance: str, set_point_c: float) -> float | None:
    """Return a standard's permitted deviation [K] at a *specified* temperature, None where it has none."""
    bands = ISO204_BANDS if tolerance == "iso204" else ASTM_E139_BANDS
    return next((k for up_to, k in bands if set_point_c <= up_to), None)


def build(file: model.LabFile, tree: Mapping[str, Any], path: Path, text: str) -> Lab:
    """Return the settings that ``file`` (and ``tree``, for drivers and bench) stands for."""
    home = path.absolute().parent
    instruments = tuple(
        _instrument(name, i, resolve(tree["instruments"][name])) for name, i in file.instruments.items()
    )
    polls = {i.name: i.poll_s for i in instruments}
    bench = None
    if file.bench is not None:
        bench = Bench(file.bench.speed, file.bench.seed, resolve(tree["bench"]))
    return Lab(
        path=path,
        text=text,
        site=file.site,
        journal=home / Path(file.journal).expanduser(),
        broker=None if file.broker is None else _broker(file.broker, home),
        instruments=instruments,
        frames=tuple(_frame(file.site, name, f, polls) for name, f in file.frames.items()),
        bench=bench,
    )


def _broker(b: model.Broker, home: Path) -> BrokerSettings:
    from daq.publish.access import BrokerSettings, parse_url

    def file(path: str | None) -> Path | None:
        return None if path is None else home / Path(path).expanduser()

    host, port, tls = parse_url(b.url)
    return BrokerSettings(
        host=host,
        port=port,
        tls=tls,
        protocol=b.protocol,
        user=b.user,
        password_file=file(b.password_file),
        ca_file=file(b.ca_file),
        cert_file=file(b.cert_file),
        key_file=file(b.key_file),
        client_id=b.client_id,
        embedded=b.embedded,
    )


def _instrument(name: str, i: model.Instrument, given: Mapping[str, Any]) -> Instrument:
    return Instrument(
        name=name,
        driver=i.driver,
        port=i.port or "",
        poll_s=i.poll_s,
        options={key: value for key, value in given.items() if key not in NOT_OPTIONS},
        emulated=i.port == EMULATED,
    )


def _frame(site: str, name: str, f: model.Frame, polls: Mapping[str, float]) -> Frame:
    owners: list[tuple[str, model.Test]] = [("", f)]
    owners += [(f"{position}/", test) for position, test in (f.positions or {}).items()]
    found = [
        (prefix + channel, c) for prefix, owner in owners for channel, c in (owner.channels or {}).items()
    ]
    sources = {}
    for column, c in found:
        if c.source is not None:
            instrument, _, reading = c.source.partition(".")
            sources[column] = (instrument, reading)
    given = f.sampling.scan_every_s if f.sampling else None
    scan_every_s = given or max((polls[i] for i, _ in sources.values() if i in polls), default=None)
    tests = [
        _test(site, name, prefix.rstrip("/"), test, f, scan_every_s)
        for prefix, test in owners
        if (prefix == "") == (f.positions is None)
    ]
    return Frame(
        name=name,
        tests=tuple(tests),
        columns=tuple(column for column, _ in found),
        sources=sources,
        scan_every_s=scan_every_s or DEFAULT_SCAN_S,
    )


def _test(
    site: str, frame: str, position: str, own: model.Test, shared: model.Frame, scan_every_s: float | None
) -> TestRules:
    def pick(key: str, default: T) -> T:
        for owner in (own, shared):
            value: T | None = getattr(owner, key)
            if value is not None:
                return value
        return default

    set_point: float | None = pick("temperature_c", None)
    below, above, tolerance = _tolerance(pick("tolerance", None), set_point)
    kj: float | None = pick("activation_energy_kj_per_mol", None)
    assert own.specimen is not None
    specimen = _specimen(own.specimen)
    return TestRules(
        site=site,
        frame=frame,
        test=f"{frame}/{position}" if position else frame,
        specimen=specimen,
        channels=tuple(_channels(position, own, shared)),
        stress_pa=_stress_pa(own, shared, specimen) * SIGN[pick("sense", "tension")],
        loading=Loading(pick("loading", "constant_load")),
        set_point_c=set_point,
        below_k=below,
        above_k=above,
        tolerance=tolerance,
        activation_energy_j_per_mol=None if kj is None else kj * 1000.0,
        stress_exponent=pick("stress_exponent", None),
        expected_rupture_h=pick("expected_rupture_h", None),
        starts=pick("starts", "first_scan"),
        scan_every_s=scan_every_s,
        limits=_limits(pick("limits", model.Limits())),
        false_share=pick("false_share", FALSE_SHARE),
    )


def _tolerance(t: object, set_point_c: float | None) -> tuple[float | None, float | None, str]:
    if isinstance(t, model.Band):
        return t.below_c, t.above_c, "stated"
    if not isinstance(t, str) or set_point_c is None:
        return None, None, ""
    k = band_k(t, set_point_c)
    return k, k, t


def _specimen(s: model.Specimen) -> Specimen:
    area = s.area_mm2
    if s.width_mm is not None and s.thickness_mm is not None:
        area = s.width_mm * s.thickness_mm
    return Specimen(s.id, s.material or "", s.extensometer_length_mm, s.diameter_mm, area)


def _stress_pa(own: model.Test, shared: model.Test, specimen: Specimen) -> float:
    """Stress in N/m2, from MPa or from mass, lever and section (1 N/mm2 = 1e6 Pa)."""
    loaded = own if (own.stress_mpa, own.mass_kg, own.lever_ratio) != (None, None, None) else shared
    if loaded.stress_mpa is not None:
        return loaded.stress_mpa * 1e6
    area = specimen.area_mm2
    if area is None:
        assert specimen.diameter_mm is not None
        area = 0.25 * 3.141592653589793 * specimen.diameter_mm**2
    assert loaded.mass_kg is not None
    assert loaded.lever_ratio is not None
    gravity = own.gravity_m_per_s2 or shared.gravity_m_per_s2 or STANDARD_GRAVITY
    return loaded.mass_kg * gravity * loaded.lever_ratio / area * 1e6


def _limits(given: model.Limits) -> Limits:
    default = Limits()

    def share(percent: float | None) -> float | None:
        return None if percent is None else percent / 100.0

    milestones = default.milestones
    if given.milestones_percent is not None:
        milestones = tuple(sorted({x / 100.0 for x in given.milestones_percent}))
    return Limits(
        milestones=milestones,
        strain=share(given.strain_percent),
        rate_per_h=share(given.rate_percent_per_h),
        gradient_k=given.gradient_k,
        excursion_min_s=default.excursion_min_s if given.excursion_min_s is None else given.excursion_min_s,
    )


def _channels(position: str, own: model.Test, shared: model.Test) -> Iterator[ChannelRules]:
    prefix = f"{position}/" if position else ""
    common = (shared.channels or {}) if position else {}
    mine = own.channels or {}
    columns = {name: name for name in common} | {name: prefix + name for name in mine}
    for name, c in (*common.items(), *mine.items()):
        factor, zero = UNITS.get(c.role, {}).get(c.unit or "", (1.0, 0.0))
        yield ChannelRules(
            name=columns[name],
            role=Role(c.role),
            side=c.side or "",
            conversion=_conversion(c.conversion or model.Conversion(), factor, zero, columns),
            rank=c.rank,
            low=None if c.low is None else c.low * factor + zero,
            high=None if c.high is None else c.high * factor + zero,
            travel_mm=c.travel_mm,
        )


def _conversion(v: model.Conversion, factor: float, zero: float, columns: Mapping[str, str]) -> Conversion:
    """Fold the channel's unit into scale and offset, the last of the steps."""
    junction = v.cold_junction if isinstance(v.cold_junction, model.Junction) else model.Junction()
    scale, offset = 1.0 if v.scale is None else v.scale, v.offset or 0.0
    return Conversion(
        scale=scale * factor,
        offset=offset * factor + zero,
        polynomial=tuple(v.polynomial or ()),
        points=tuple((raw, value) for raw, value in v.points or ()),
        thermocouple=v.thermocouple or "",
        cold_junction_c=junction.fixed_c,
        cold_junction_channel="" if junction.channel is None else columns[junction.channel],
        pt100=bool(v.pt100),
        raw_scale=1.0 if v.raw_unit is None else RAW[v.raw_unit],
    )
