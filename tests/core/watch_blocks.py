"""Blocks of scans for the tests of the watchers, made by hand: no conversion, no chain."""

from __future__ import annotations

import numpy as np

from daq.core.block import Block
from daq.core.rules import ChannelRules, Limits, Role, Specimen, TestRules
from daq.records import TICKS_PER_S, FloatArray, Quality

ROLES = {
    "a": (Role.STRAIN, "A"),
    "b": (Role.STRAIN, "B"),
    "top": (Role.SPECIMEN_TEMPERATURE, ""),
    "mid": (Role.SPECIMEN_TEMPERATURE, ""),
    "bot": (Role.SPECIMEN_TEMPERATURE, ""),
    "output": (Role.CONTROLLER_OUTPUT, ""),
    "force": (Role.FORCE, ""),
    "switch": (Role.BREAK_SWITCH, ""),
    "stop": (Role.LIMIT_SWITCH, ""),
}


def rules_for(names: list[str], limits: Limits | None = None, **more: object) -> TestRules:
    """Rules of a test at 600 +- 3 degC with these channels of ROLES."""
    channels = tuple(ChannelRules(n, ROLES[n][0], ROLES[n][1]) for n in names)
    values: dict[str, object] = {
        "set_point_c": 600.0,
        "below_k": 3.0,
        "above_k": 3.0,
        "limits": limits or Limits(),
        "channels": channels,
    }
    values.update(more)
    return TestRules("site", "H1", "H1", Specimen("S-1", extensometer_length_mm=25.0), **values)  # type: ignore[arg-type]


def block_of(
    rules: TestRules,
    columns: dict[str, FloatArray],
    every_s: float = 30.0,
    t_s: FloatArray | None = None,
    why_bad: int = Quality.BAD_MISSING,
    quality: dict[str, FloatArray] | None = None,
) -> Block:
    """One block of all scans; NaN readings get the quality ``why_bad``."""
    n = len(next(iter(columns.values())))
    t_s = np.arange(n) * every_s if t_s is None else t_s
    values = np.stack([np.asarray(columns[c.name], float) for c in rules.channels], axis=1)
    codes = np.where(np.isnan(values), int(why_bad), 0).astype(np.uint8)
    for name, column in (quality or {}).items():
        j = [c.name for c in rules.channels].index(name)
        codes[:, j] = column
    temperature = [i for i, c in enumerate(rules.channels) if c.role is Role.SPECIMEN_TEMPERATURE]
    none = np.full(n, np.nan)
    with np.errstate(invalid="ignore"):
        good = np.isfinite(values[:, temperature])
        total = np.where(good, values[:, temperature], 0.0).sum(axis=1)
        mean = np.where(good.any(axis=1), total / np.maximum(good.sum(axis=1), 1), np.nan)
    return Block(
        0,
        np.round(t_s * TICKS_PER_S).astype(np.int64),
        t_s.astype(float),
        values,
        codes,
        np.asarray(columns.get("a", none), float),
        np.asarray(columns.get("b", none), float),
        mean if temperature else none,
        none,
        np.asarray(columns.get("output", none), float),
    )
