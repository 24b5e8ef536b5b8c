"""What `show` says of uncertainties, moving probes and moved neighbours; and which of it a study refuses."""

from __future__ import annotations

import numpy as np
import pytest

import latticedip as ld
from latticedip.errors import StudyError
from latticedip.report.show import show_text
from latticedip.study.tasks import show
from tests.commands import box_cif

CIF = box_cif("Mn1 Mn 0 0 0.1230(4)\nF1 F 0.2350(3) 0.31 0.41\nF2 F 0.7350(3) 0.31 0.41\n", 5, 5, 7, name="a")
MOMENTS = "[moments]\nMn = { size = 4.4, su = 0.2 }\n"
ORDERING = '[[ordering]]\nname = "one"\nk = [0, 0, 0]\nalong = [0, 0, 1]\n'


def write(folder, text: str):
    (folder / "a.cif").write_text(CIF, encoding="utf-8")
    path = folder / "study.toml"
    path.write_text(f'[crystal]\nfile = "a.cif"\n{text}', encoding="utf-8")
    return path


def test_uncertainties_and_motion_are_listed(tmp_path):
    probe = """[[probe]]
name = "A"
position = [0.5, 0.5, 0.5]
position_su = [0.01, 0, 0.002]
spread_A = 0.15
displaced = [{ shell = 1, factor = 1.05 }]
"""
    path = write(tmp_path, MOMENTS + ORDERING + probe)
    document = show(path)
    assert document["moments_su_muB"] == {"Mn": 0.2}
    (listed,) = document["probes"]
    assert (listed["position_su"], listed["spread"]) == ([0.01, 0, 0.002], 0.15)
    assert listed["motion"] == [
        "displaced atoms of shell 1: distance times 1.05",
        "field averaged over a Gaussian spread of 0.15 Å rms along each axis",
        "position uncertain by (0.01, 0, 0.002), fractional",
    ]
    assert document["sites"][0]["positions_su"] == [[None, None, 4e-4]]
    (atom,) = document["orderings"][0]["atoms"]
    assert atom["along_su_muB"] == pytest.approx(0.2)
    assert atom["moment_su_muB"] == [0.0, 0.0, pytest.approx(0.2)]
    text = show_text(document, width=100)
    for words in ("Mn  4.4(2) µB", "0.1230(4)", "0.2350(3)", "4.4(2)\n", "- A: displaced atoms of shell 1"):
        assert words in text, words


def test_moments_of_a_file_carry_theirs(tmp_path):
    ordering = ld.Ordering(
        ld.Crystal(np.diag([5.0, 5, 7]), [[0, 0, 0], [0.5, 0.5, 0.3]], ["Mn", "Fe"]),
        [[0, 0, 3.0], [1.0, 0, 2.0]],
        moment_su=[[np.nan, np.nan, 0.1], [0.2, np.nan, 0.3]],
    )
    from latticedip.files.write import write_ordering

    write_ordering(ordering, tmp_path / "m.mcif")
    text = show_text(show(tmp_path / "m.mcif"), width=100)
    for words in ("3.00(10)", "1.0(2)", "2.0(3)"):
        assert words in text, words


def test_probes_by_rule_move_too(tmp_path):
    rule = '[[probe]]\nrule = "every F site"\nspread_A = 0.1\ndisplaced = [{ shell = 1, of = "Mn", factor = 1.02 }]\n'
    study = ld.read_study(write(tmp_path, MOMENTS + ORDERING + rule))
    found = [(probe.site, probe.spread, len(probe.displaced)) for probe in study.probes]
    assert found == [("F1", 0.1, 1), ("F2", 0.1, 1)]
    points = '[[probe]]\nrule = "points at least 2 Å from any atom"\nUij = [0.01, 0.01, 0.02, 0, 0, 0]\n'
    study = ld.read_study(write(tmp_path, MOMENTS + ORDERING + points))
    for probe in study.probes:
        np.testing.assert_allclose(probe.spread, np.diag([0.01, 0.01, 0.02]), atol=1e-12)


PROBE = '[[probe]]\nrule = "every F site"\n'
REFUSED = {
    MOMENTS.replace("0.2", "-0.2"): "`moments.Mn.su`: got -0.2, expected the standard uncertainty of the size in Bohr "
    "magnetons, from 0 to 1e+06.",
    "[moments]\nMn = { su = 0.2 }\n": "`moments.Mn.size`: missing, expected a size in Bohr magnetons, at least 0.",
    "[moments]\nMn = { size = 0, su = 0.2 }\n": "`moments.Mn.su`: goes with a size above 0: the uncertainty is one of "
    "the size, along its direction.",
    '[moments]\nMn = "4.4(2)"\n': '`moments.Mn`: got "4.4(2)", expected a size in Bohr magnetons, at least 0.',
    PROBE + "position_su = [0, 0, 0]\n": "`probe[1].position_su`: unknown key; known here are rule, name, particle, "
    "spacing_A, spread_A, covariance_A2, Uij, displaced.",
    PROBE + "spread_A = -1\n": "`probe[1].spread_A`: got -1, expected the rms displacement along each axis in Å, at "
    "least 0.",
}


@pytest.mark.parametrize("text", REFUSED)
def test_refused(tmp_path, text):
    path = write(tmp_path, text)
    with pytest.raises(StudyError) as caught:
        ld.read_study(path)
    assert str(caught.value) == f"{path}: {REFUSED[text]}"
