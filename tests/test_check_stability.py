"""The check's word on each cell: limits, margins, what becomes of spikes, and what to do."""

from __future__ import annotations

import sys
from pathlib import Path

import pytest

from gatestep.cli import main
from gatestep.commands import check as command
from gatestep.hostfacts import Finding


def rig_of(folder: Path, loop: str, *cells: str) -> Path:
    path = folder / "rig.toml"
    path.write_text(f"[loop]\n{loop}\n" + "".join(f"[[cell]]\n{cell}\n" for cell in cells))
    return path


SQUID = 'name = "a"\nmodel = "squid-na-k"\ncapacitance_pf = 30.0\n'


def stability_of(path: Path) -> list[Finding]:
    return command.stability_section(command.read_files(path)).findings


def test_limits_margins_settings_and_fate_are_told(tmp_path):
    """Squid axon at 20 µs and one tick: the plain loop's limit is 1500 nS less 10 % and R's part.

    The most it opens is 2231 nS by the published equations; ringing plain, it is faithful
    to some µs where the delay is taken out.
    """
    (finding,) = stability_of(rig_of(tmp_path, "interval_us = 20.0", SQUID))
    assert (finding.name, finding.verdict, finding.remedy) == ("cell a", "ok", None)
    more = finding.more
    assert more["on"]
    assert more["plain_limit_ns"] == pytest.approx(1350.0, rel=0.03)
    assert more["operating_ns"] == pytest.approx(2231.0, rel=0.01)
    assert more["plain_margin"] == pytest.approx(more["plain_limit_ns"] / more["operating_ns"])
    assert more["margin"] == more["anticipating_margin"] >= 1.1
    foretold = more["foretold"]
    assert foretold["spikes"] == foretold["plain"]["spikes"] == foretold["anticipating"]["spikes"]
    assert foretold["plain"]["error_us"] > 300.0
    assert abs(foretold["anticipating"]["error_us"]) < 20.0
    for shown in ("2231 nS", "4680 nS", "C 30 pF within 10%", "anticipation on", "simulated, "):
        assert shown in finding.found


def test_a_loop_that_rings_is_missing_and_told_to_take_the_delay_out(tmp_path):
    """50 µs, one tick, anticipation switched off: spikes come in another number."""
    loop = "interval_us = 50.0\nanticipate = false"
    (finding,) = stability_of(rig_of(tmp_path, loop, SQUID))
    assert finding.verdict == "missing"
    assert finding.more["margin"] == finding.more["plain_margin"] < 0.3
    assert finding.more["foretold"]["plain"]["error_us"] is None
    assert 'loop.anticipate = "auto"' in (finding.remedy or "")


@pytest.mark.parametrize(
    ("loop", "known"),
    [
        ("interval_us = 100.0", "capacitance_uncertainty = 0.6\n"),
        ("interval_us = 20.0", "[cell.electrode]\nresidue_mohm = 1.5\n"),
        ("interval_us = 100.0\nanticipate = false", ""),
        ('interval_us = 25.0\napply = "on-arrival"\nanticipate = false', ""),
        ("interval_us = 20.0\nanticipate = true", "[cell.electrode]\nresidue_mohm = 0.6\n"),
    ],
)
def test_every_remedy_brings_the_margin_back(tmp_path, loop, known):
    """Each is put into the rig file as it is written; the verdict is then ok."""
    (finding,) = stability_of(rig_of(tmp_path, loop, SQUID + known))
    assert finding.verdict != "ok"
    remedies_given = (finding.remedy or "").split("; or ")
    tick, key = loop.partition("\n")[::2]
    for remedy in remedies_given[:-1]:
        if "interval_us" in remedy:
            changed = rig_of(
                tmp_path, f"{remedy.split('.', 1)[1].split(',')[0]}\n{key}", SQUID + known
            )
        elif "anticipate" in remedy:
            changed = rig_of(tmp_path, tick, SQUID + known)
        elif "uncertainty" in remedy:
            changed = rig_of(tmp_path, loop, SQUID + remedy.rpartition(", ")[2])
        else:
            residue = remedy.rpartition("] ")[2]
            changed = rig_of(tmp_path, loop, f"{SQUID}[cell.electrode]\n{residue}\n")
        (better,) = stability_of(changed)
        assert better.verdict == "ok", remedy
    factor = float(remedies_given[-1].partition(", ")[2].split()[0])
    assert factor == pytest.approx(finding.more["margin"] / 1.1, rel=0.06)


def test_without_a_capacitance_nothing_is_known(tmp_path):
    """The verdict is weak, the conductances are told, and no spike is foretold."""
    path = rig_of(tmp_path, "interval_us = 20.0", 'name = "a"\nmodel = "squid-na-k"')
    (finding,) = stability_of(path)
    assert finding.verdict == "weak"
    assert finding.more["margin"] is finding.more["foretold"] is None
    assert "capacitance_pf" in (finding.remedy or "")


def test_a_cell_that_does_not_fire_has_no_spike_to_foretell(tmp_path):
    """A leak makes no cell fire."""
    cell = 'name = "a"\nmodel = "leak"\ncapacitance_pf = 30.0'
    (finding,) = stability_of(rig_of(tmp_path, "interval_us = 20.0", cell))
    assert finding.verdict == "ok"
    assert finding.more["foretold"] is None
    assert "simulated" not in finding.found


def test_spikes_are_foretold_for_the_simulated_cell_with_its_own_conductances(tmp_path):
    """A cell that fires by itself, given a leak, under its own steps: both loops follow it."""
    path = rig_of(
        tmp_path,
        "interval_us = 20.0",
        'name = "a"\nmodel = "leak"\ncapacitance_pf = 30.0\n'
        '[simulated]\n[[simulated.cell]]\nnative = ["squid-axon"]\nleak_ns = 0.0\n'
        "[[simulated.cell.step]]\nstart_ms = 5.0\nstop_ms = 200.0\ncurrent_pa = 400.0",
    )
    (finding,) = stability_of(path)
    foretold = finding.more["foretold"]
    assert "its own steps" in finding.found
    assert foretold["spikes"] >= 5
    assert abs(foretold["plain"]["error_us"]) < 100.0
    assert abs(foretold["anticipating"]["error_us"]) < 10.0


def test_a_simulated_cell_that_cannot_be_made_is_said_and_no_more(tmp_path):
    """Its native model is missing; limits and margins stand all the same."""
    path = rig_of(
        tmp_path,
        "interval_us = 20.0",
        SQUID + '[simulated]\n[[simulated.cell]]\nnative = ["no-such-model"]',
    )
    (finding,) = stability_of(path)
    assert finding.verdict == "ok"
    assert "spikes cannot be foretold" in finding.found
    assert "no-such-model" in finding.found


def test_anticipation_that_cannot_be_is_a_fault_of_the_rig_file(tmp_path, monkeypatch, capsys):
    """Asked for without a capacitance: the key is named, and the status is 1."""
    cell = 'name = "a"\nmodel = "leak"'
    path = rig_of(tmp_path, "interval_us = 20.0\nanticipate = true", cell)
    monkeypatch.setattr(sys, "argv", ["gatestep", "check", str(path)])
    with pytest.raises(SystemExit) as ended:
        main()
    assert ended.value.code == 1
    assert "loop.anticipate = true needs the capacitance of cell 'a'" in capsys.readouterr().err
