"""The JSON Schema that editors use says what the models say."""

from __future__ import annotations

import json
from pathlib import Path

import jsonschema
import pytest

from daq.settings.schema import FILE, schema, text
from daq.yamlmarks import read, resolve

CONFIG = Path(__file__).parents[2] / "config"


@pytest.fixture(scope="module")
def judge() -> jsonschema.Draft202012Validator:
    """The shipped schema, itself judged first."""
    shipped = json.loads(FILE.read_text(encoding="utf-8"))
    jsonschema.Draft202012Validator.check_schema(shipped)
    return jsonschema.Draft202012Validator(shipped)


def test_the_shipped_schema_is_current() -> None:
    """After a change of the models: python -m daq.settings.schema."""
    assert json.loads(FILE.read_text(encoding="utf-8")) == schema()
    assert FILE.read_text(encoding="utf-8") == text()


@pytest.mark.parametrize("path", sorted(CONFIG.glob("*.yaml")), ids=lambda p: p.name)
def test_every_sample_fits_the_schema(path: Path, judge: jsonschema.Draft202012Validator) -> None:
    """An editor must not underline what the program takes."""
    judge.validate(resolve(read(path.read_text(encoding="utf-8")).tree))


@pytest.mark.parametrize(
    ("was", "becomes"),
    [
        ("stress_mpa", "stres_mpa"),
        ("stress_mpa: 200", "stress_mpa: 0"),
        ("stress_mpa: 200", "stress_mpa: 200\n    mass_kg: 3"),
        ("tolerance: iso204", "tolerance: iso"),
        ("role: strain", "role: strian"),
        ("temperature_c: 980", "temperature_c: -300"),
        ("    temperature_c: 980\n", ""),
        ("journal: var/hall-a\n", ""),
    ],
)
def test_an_editor_sees_the_common_mistakes(
    was: str, becomes: str, judge: jsonschema.Draft202012Validator
) -> None:
    """Misspelt keys and words, numbers out of range, what must be there."""
    sample = (CONFIG / "minimal.yaml").read_text(encoding="utf-8")
    assert was in sample
    with pytest.raises(jsonschema.ValidationError):
        judge.validate(resolve(read(sample.replace(was, becomes, 1)).tree))
