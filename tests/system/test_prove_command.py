"""``upturn prove`` as a user meets it: same seed, same table; gone on with; wrong input in one line."""

from __future__ import annotations

import json
from importlib.resources import files
from pathlib import Path

import jsonschema
import numpy as np
import pytest

from daq import cli, settings
from daq.exits import OK, USAGE
from daq.prove import frame, plot, say, table
from simulator.alike import KINDS, Alike, Measured, draw
from simulator.rig import simulate, write_csv
from simulator.spec import Furnace, RigSpec, Told

LAB = """\
site: hall-a
journal: rec
frames:
  H1:
    specimen: {id: S-1, extensometer_length_mm: 25.0, diameter_mm: 6.0}
    stress_mpa: 200
    temperature_c: 980
    tolerance: iso204
    activation_energy_kj_per_mol: 330
    expected_rupture_h: 500
    starts: first_scan
    channels:
      left: {role: strain, side: A}
      right: {role: extension, side: B}
      mid: {role: specimen_temperature}
  H2:
    specimen: {id: S-2, diameter_mm: 6.0}
    stress_mpa: 200
    temperature_c: 980
    tolerance: iso204
    starts: first_scan
    channels:
      mid: {role: specimen_temperature}
"""


@pytest.fixture
def lab(tmp_path: Path) -> Path:
    """A lab file with a frame that measures strain and one that does not; no journal."""
    path = tmp_path / "lab.yaml"
    path.write_text(LAB)
    return path


def _prove(lab: Path, *more: str) -> int:
    return cli.main(["prove", str(lab), "--frame", "H1", "--scans", "50", "--seed", "2", *more])


def test_the_table_is_the_same_on_one_and_two_workers_and_fits_its_schema(
    lab: Path, tmp_path: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    """Nothing of a rig may depend on who else was running, or on the order in which rows came."""
    for workers in ("1", "2"):
        assert _prove(lab, "--rigs", "3", "--workers", workers, "--out", str(tmp_path / workers)) == OK
    one, two = ((tmp_path / w / "table.json").read_bytes() for w in ("1", "2"))
    assert one == two
    told = json.loads(one)
    schema = json.loads((files("daq") / "schemas" / "prove_table.json").read_text(encoding="utf-8"))
    jsonschema.Draft202012Validator.check_schema(schema)
    jsonschema.validate(told, schema)
    assert told["figures"]["rigs"] == 3
    out = capsys.readouterr().out
    assert "simulated rigs alike, seed 2 (simulated rigs; advises only)" in out
    assert "false_share" in out
    assert max(map(len, out.splitlines())) <= 80


def test_a_campaign_is_gone_on_with_to_the_same_table_as_in_one_go(lab: Path, tmp_path: Path) -> None:
    """Rigs are drawn by number, so two and then three are the same three; rows that are there stay."""
    parts, whole = tmp_path / "parts", tmp_path / "whole"
    for rigs in ("2", "3"):
        assert _prove(lab, "--rigs", rigs, "--workers", "1", "--out", str(parts)) == OK
    lines = (parts / "rows.jsonl").read_text().splitlines()
    assert sorted(json.loads(line)["index"] for line in lines[1:]) == [0, 1, 2]
    assert _prove(lab, "--rigs", "3", "--workers", "1", "--out", str(whole)) == OK
    assert (parts / "table.json").read_bytes() == (whole / "table.json").read_bytes()


def test_another_seed_in_the_same_folder_is_refused(
    lab: Path, tmp_path: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    """The folder is one campaign's."""
    (tmp_path / "p").mkdir()
    what = frame.likeness(settings.load(lab), "H1", (), 50)
    from daq.prove.rows import Rows, header

    Rows(header(what, 5), tmp_path / "p").close()
    assert _prove(lab, "--rigs", "1", "--out", str(tmp_path / "p")) == USAGE
    assert "got a campaign with seed 5 (now 2)" in capsys.readouterr().err


@pytest.mark.parametrize(
    ("more", "said"),
    [
        (["--frame", "H9"], "--frame: got 'H9', wanted one of H1, H2"),
        (["--frame", "H2"], "frames.H2.channels: got no strain or extension, wanted at least one side"),
        (["--curve", "wave"], "--curve: got 'wave', wanted some of theta"),
        (["--scans", "3"], "--scans: got 3, wanted at least 50"),
    ],
)
def test_wrong_input_is_one_line_with_place_got_and_wanted(
    lab: Path, capsys: pytest.CaptureFixture[str], more: list[str], said: str
) -> None:
    """A campaign takes minutes: what cannot be done is said before it begins."""
    assert _prove(lab, *more) == USAGE
    err = capsys.readouterr().err
    assert said in err
    assert err.count("\n") == 1


def test_a_string_is_asked_which_position(tmp_path: Path) -> None:
    """Two specimens of a string differ in section, life and channels."""
    sample = Path(__file__).parents[2] / "config" / "string.yaml"
    with pytest.raises(frame.ProveError, match="--frame: got 'H7', wanted one of H7/upper, H7/lower"):
        frame.test_of(settings.load(sample), "H7")
    _, rules = frame.test_of(settings.load(sample), "H7/lower")
    assert frame.strain_sides(rules) == {"A", "B"}


def test_without_any_record_the_noise_is_the_populations_and_the_output_says_so(lab: Path) -> None:
    """Figures of assumed noise must not pass for figures of the frame."""
    what = frame.likeness(settings.load(lab), "H1", (), 60)
    assert what.alike.measured == Measured()
    assert "general population" in what.noise_from
    assert (what.alike.sides, what.alike.thermocouples, what.alike.room) == (2, 1, False)
    assert what.alike.told.expected_rupture_h == 500.0
    assert what.alike.every_s is None


def test_the_noise_of_a_recording_is_measured_near_the_truth(lab: Path, tmp_path: Path) -> None:
    """Scatter within a tenth; drift, part of which is taken for creep or temperature, within three."""
    from dataclasses import replace

    quiet = Alike(2, 1, 980.0, 5.0, Told(330e3, 500.0), kinds=("to_steady",), every_s=1500.0, most_scans=2000)
    noisy = replace(quiet, measured=Measured(30e-6, (40e-6, 8.0), 0.3, None))
    spec: RigSpec = replace(draw(noisy, 3, 0), events=(), furnace=Furnace(980.0, 0.3, 2.0))
    spec = replace(spec, transducers=tuple(replace(t, spike_share=0.0) for t in spec.transducers))
    write_csv(simulate(spec), tmp_path / "H1.csv")
    text = LAB.replace("role: extension", "role: strain")
    lab.write_text(text)
    what = frame.likeness(settings.load(lab), "H1", (), 60, tmp_path / "H1.csv")
    assert what.noise_from == "as measured in H1.csv"
    m = what.alike.measured
    assert m.white == pytest.approx(30e-6, rel=0.1)
    assert m.drift is not None
    assert 40e-6 / 3.0 < m.drift[0] < 3.0 * 40e-6
    assert 1.0 < m.drift[1] < 100.0
    assert m.furnace_k == pytest.approx(0.3, rel=0.3)
    rig = draw(what.alike, 1, 0)
    assert all(t.drifts == (m.drift,) for t in rig.transducers)


def test_rigs_alike_are_repeatable_and_as_the_frame_says() -> None:
    """Rig number i is the same whoever asks, and none has a channel or a section the frame has not."""
    told = Told(330e3, 500.0, 200.0, 5.0, constant_load=False)
    one = Alike(1, 4, 700.0, 3.0, told, output=True, every_s=60.0, most_scans=500)
    lives = []
    for index in range(12):
        rig = draw(one, 2, index)
        assert rig == draw(one, 2, index)
        assert (len(rig.transducers), len(rig.thermocouples)) == (1, 4)
        assert rig.channels[-1] == "output"
        assert rig.furnace.set_point_c == 700.0
        assert rig.creep.family != "constant_load"
        assert 0.6 <= 330e3 / rig.activation_energy_j_per_mol <= 1.6
        steps = [e.size for e in rig.events if e.kind == "furnace_step"]
        assert all(abs(x) <= 1.6 * 3.0 for x in steps)
        lives.append(rig.rupture_h or rig.duration_h)
    assert 100.0 < np.median(lives) < 1500.0
    assert {draw(Alike(2, 1, None, None, told, kinds=("theta",)), 2, i).kind for i in range(4)} == {"theta"}
    assert "theta" in KINDS


def _level(share: float, false: int, median: float) -> dict[str, object]:
    return {
        "false_share": share,
        "false": {"count": false, "of": 100, "share": false / 100, "low_95": 0.0, "high_95": 0.1},
        "missed": 0,
        "delay_over_best": {"of": 10, "median": median, "high_90": None if share < 1e-3 else 2 * median},
    }


def test_the_plot_is_a_picture_whatever_the_levels_came_to(tmp_path: Path) -> None:
    """No false one at all, and delays without a 90 % figure, have no place on its axes."""
    pytest.importorskip("matplotlib", reason="the extra plots is not installed")
    figures = {"rigs": 100, "levels": [_level(0.2, 7, 1.1), _level(0.005, 0, 1.3), _level(1e-4, 0, 1.3)]}
    plot.draw(figures, "H1", 0.005, tmp_path / "x.png")
    assert (tmp_path / "x.png").read_bytes().startswith(b"\x89PNG")


def test_without_the_plotting_package_a_campaign_says_so_and_succeeds(
    lab: Path, tmp_path: Path, capsys: pytest.CaptureFixture[str], monkeypatch: pytest.MonkeyPatch
) -> None:
    """The figures are worth having without a picture."""
    monkeypatch.setattr(plot, "available", lambda: False)
    assert _prove(lab, "--rigs", "1", "--workers", "1", "--out", str(tmp_path / "p")) == OK
    assert "no plot: the package matplotlib is not here" in capsys.readouterr().err
    assert not (tmp_path / "p" / "evidence.png").exists()


def test_a_table_of_no_rigs_is_said_in_dashes() -> None:
    """A campaign may be stopped before its first rig; nothing may divide by zero."""
    text = "\n".join(say.lines(table.figures([])))
    assert "none of 0 rigs" in text
