"""README and DEVELOPERS tell the truth: commands, samples and diagrams are those of the program."""

from __future__ import annotations

import re
from pathlib import Path

import pytest

from daq import settings
from daq.cli import parser
from daq.core import alarm_table, stages

ROOT = Path(__file__).parents[2]
README = (ROOT / "README.md").read_text(encoding="utf-8")
DEVELOPERS = ROOT / "DEVELOPERS.md"


def stage_diagram() -> str:
    """Return the stage table as a mermaid diagram; what leads away from every stage is drawn once."""
    lines = ["stateDiagram-v2"]
    targets: dict[tuple[stages.Cue, stages.Stage], list[stages.Stage]] = {}
    for (source, cue), target in stages.TABLE.items():
        targets.setdefault((cue, target), []).append(source)
    for (cue, target), sources in targets.items():
        if len(sources) > 3:
            lines.append(f"    note right of {_name(target)}: from every earlier stage on {cue.value}")
            continue
        lines += [f"    {_name(source)} --> {_name(target)}: {cue.value}" for source in sources]
    return "\n".join(lines)


def _name(stage: stages.Stage) -> str:
    return stage.value.replace(" ", "_")


def with_diagrams(text: str) -> str:
    """Return DEVELOPERS.md with both diagrams as the tables stand."""
    for mark, diagram in (("stages", stage_diagram()), ("alarms", alarm_table.diagram())):
        new = f"<!-- {mark} -->\n```mermaid\n{diagram.strip()}\n```\n<!-- /{mark} -->"
        text = re.sub(f"<!-- {mark} -->.*?<!-- /{mark} -->", lambda m, new=new: new, text, flags=re.DOTALL)
    return text


def test_the_diagrams_are_drawn_from_the_tables() -> None:
    """A diagram that is drawn by hand is wrong after the next change."""
    text = DEVELOPERS.read_text(encoding="utf-8")
    assert text == with_diagrams(text), "run: python tests/system/test_docs.py"


def _blocks(language: str) -> list[str]:
    return re.findall(rf"^```{language}\n(.*?)^```$", README, flags=re.DOTALL | re.MULTILINE)


def test_the_configuration_of_the_readme_loads() -> None:
    """What a newcomer copies must work."""
    (text,) = _blocks("yaml")
    lab = settings.loads(text, ROOT / "README.yaml")
    assert [f.name for f in lab.frames] == ["H1"]
    assert {i.driver for i in lab.instruments} == {"textline", "scpi"}


@pytest.mark.parametrize("path", sorted((ROOT / "config").glob("*.yaml")), ids=lambda p: p.name)
def test_every_sample_loads(path: Path) -> None:
    """Samples are where people start."""
    assert settings.load(path).frames


def test_commands_named_in_the_readme_exist_and_no_other_is_missing() -> None:
    """The table of commands is the list of commands."""
    named = set(re.findall(r"^\| `upturn (\w+)", README, flags=re.MULTILINE))
    group = next(a for a in parser()._actions if a.dest == "command")
    assert group.choices is not None
    assert named == set(group.choices)


def test_both_one_line_commands_are_there() -> None:
    """One runs the bench, one passes the tests; the check on a new machine reads the second from here."""
    for mark in ("run", "test"):
        found = re.search(rf"<!-- {mark} command -->\n```sh\n(.+)\n```", README)
        assert found is not None
        assert "\n" not in found[1]
        assert found[1].startswith("python3 -m venv .venv && .venv/bin/pip install ")


if __name__ == "__main__":
    DEVELOPERS.write_text(with_diagrams(DEVELOPERS.read_text(encoding="utf-8")), encoding="utf-8")
