"""Coupling tensors and shifts of probes that move, and their standard uncertainties."""

from __future__ import annotations

import dataclasses

import numpy as np
import pytest

import latticedip as ld
from latticedip.errors import InputError
from latticedip.observables.tensor import principal_frame

CELL = np.array([[5.0, 0, 0], [0.6, 6.0, 0], [-0.4, 0.8, 7.0]])
SITES = np.array([[0.1, 0.2, 0.3], [0.6, 0.5, 0.2], [0.3, 0.8, 0.7]])
SU = np.array([[1e-3, 2e-3, np.nan], [5e-4, 0, 1e-3], [2e-3, 1e-3, 1e-3]])
POINT = np.array([0.45, 0.3, 0.55])
POINT_SU = np.array([1e-3, 0, 2e-3])
TILTED = np.array([[0.2, 0.05, 0], [0.05, 0.3, 0], [0, 0, 0.15]])
PLATE = ld.Sample.plate([1, 2, 3])
CONTACT = ld.Contact([[0.1, 0.02, 0], [0.02, 0.3, 0], [0, 0, -0.2]], within=4.0)
CHI = np.array([[0.02, 0.004, 0], [0.004, 0.03, 0], [0, 0, 0.01]])
CHI_SU = np.array([[1e-3, 5e-4, 0], [5e-4, 2e-3, 0], [0, 0, 1e-3]])


def crystal(sites=SITES, su=SU) -> ld.Crystal:
    return ld.Crystal(CELL, sites, ["Mn", "Fe", "O"], occupancies=[1.0, 0.6, 1.0], position_su=su)


@pytest.mark.parametrize("spread", [0.1, 1.1, TILTED], ids=["ball", "wide ball", "tilted"])
@pytest.mark.parametrize("position", [POINT, SITES[2]], ids=["free", "site"])
def test_a_moving_probe_has_the_coupling_of_its_mean_field(position, spread):
    """The columns of the tensor are fields of unit moments, averaged over the same cloud."""
    moved = ld.Displaced(shell=1, factor=1.05)
    found = ld.coupling_tensor(crystal(), position, magnetic=["Mn", "Fe"], spread=spread, displaced=moved)
    for axis, moment in enumerate(np.eye(3)):
        ordering = ld.Ordering(crystal(), [moment, moment, np.zeros(3)])
        field = ld.local_field(ordering, ld.Probe(position, spread=spread, displaced=moved))
        np.testing.assert_allclose(found.dipolar[:, axis], field.dipolar[0], atol=1e-9)
        np.testing.assert_allclose(found.lorentz[:, axis], field.lorentz[0], atol=1e-12)
    assert abs(np.trace(found.dipolar)) < 1e-9
    assert "displaced: atoms of shell 1: distance times 1.05" in found.notes
    assert any(note.startswith("field averaged over a Gaussian spread of ") for note in found.notes)
    reached = "the spread of the probe reaches atom Mn: "
    assert any(note.startswith(reached) for note in found.notes) is (np.ndim(spread) == 0 and spread > 1)
    shift = ld.paramagnetic_shift(
        crystal(), position, {"Mn": ld.Susceptibility(0.01, "muB/T"), "Fe": ld.Susceptibility(0.01, "muB/T")},
        spread=spread, displaced=moved,
    )  # fmt: skip
    np.testing.assert_allclose(shift.dipolar, 0.01 * found.dipolar, atol=1e-11)


def test_no_spread_is_the_point():
    plain = ld.coupling_tensor(crystal(su=None), POINT, magnetic="Mn")
    for spread in (None, 0.0, np.zeros((3, 3))):
        found = ld.coupling_tensor(crystal(), POINT, magnetic="Mn", spread=spread)
        np.testing.assert_allclose(found.dipolar, plain.dipolar, atol=1e-10)
        assert found.notes == plain.notes
    assert np.isnan(plain.dipolar_su).all() and np.isnan(plain.principal_values_su).all()
    assert plain.to_dict()["dipolar_su_T_per_muB"] is None


@pytest.mark.parametrize("spread", [None, TILTED], ids=["point", "tilted"])
@pytest.mark.parametrize("where", ["free", "site"])
def test_positions_by_finite_differences(where, spread):
    moved = ld.Displaced(atom=(0, (0, 0, 0)), vector_A=(0.1, 0.05, -0.1))

    def coupling(sites=SITES, point=POINT, su=None):
        place = point if where == "free" else sites[2]
        uncertain = {"position_su": POINT_SU} if where == "free" and su is not None else {}
        return ld.coupling_tensor(
            crystal(sites, su), place, magnetic=["Mn", "Fe"], spread=spread, displaced=moved, tol=1e-12, **uncertain
        )

    base = coupling(su=SU)
    square, values = np.zeros((3, 3)), np.zeros(3)
    step = 1e-6
    parameters = [(i, a, SU[i, a]) for i, a in np.ndindex(3, 3) if np.nan_to_num(SU[i, a]) > 0]
    parameters += [(-1, a, POINT_SU[a]) for a in range(3)] if where == "free" else []
    for site, axis, su in parameters:
        change = np.zeros((3, 3))
        change[site, axis] = step
        ends = [
            coupling(point=POINT + sign * change[-1]) if site < 0 else coupling(SITES + sign * change)
            for sign in (1, -1)
        ]
        square += ((ends[0].dipolar - ends[1].dipolar) / (2 * step) * su) ** 2
        values += ((ends[0].principal_values - ends[1].principal_values) / (2 * step) * su) ** 2
    np.testing.assert_allclose(base.dipolar_su, np.sqrt(square), rtol=1e-4, atol=1e-8)
    np.testing.assert_allclose(base.principal_values_su, np.sqrt(values), rtol=1e-4, atol=1e-8)
    assert base.to_dict()["dipolar_principal_values_su_T_per_muB"] == base.principal_values_su.tolist()


def test_random_draws_have_this_width():
    """Monte Carlo: sites, probe and susceptibilities drawn from their normal distributions, 2000 times."""
    rng = np.random.default_rng(7)

    def shift(sites=SITES, point=POINT, chi=CHI, iron=0.03, **options):
        return ld.paramagnetic_shift(
            crystal(sites, options.pop("site_su", None)), point,
            {"Mn": ld.Susceptibility(chi, "muB/T", chi_su=options.pop("chi_su", None)),
             "Fe": ld.Susceptibility(iron, "muB/T", chi_su=options.pop("iron_su", None))},
            contact=ld.Contact(0.2, shell=1), sample=PLATE, **options,
        )  # fmt: skip

    base = shift(site_su=SU, position_su=POINT_SU, chi_su=CHI_SU, iron_su=0.002)
    totals, isotropic, along, values = [], [], [], []
    h = np.array([2.0, -1.0, 2.0]) / 3
    for _ in range(2000):
        noise = rng.normal(size=(3, 3)) * CHI_SU
        chi = CHI + np.triu(noise) + np.triu(noise, 1).T
        one = shift(
            SITES + rng.normal(size=(3, 3)) * np.nan_to_num(SU), POINT + rng.normal(size=3) * POINT_SU, chi,
            0.03 + 0.002 * rng.normal(), tol=1e-6,
        )  # fmt: skip
        totals.append(one.total)
        isotropic.append(one.isotropic)
        along.append(one.along(h))
        values.append(one.principal.values)
    # The standard deviation of 2000 draws is uncertain by 1.6 %.
    np.testing.assert_allclose(np.std(totals, axis=0), base.total_su, rtol=0.06, atol=1e-8)
    np.testing.assert_allclose(np.std(isotropic), base.isotropic_su, rtol=0.06)
    np.testing.assert_allclose(np.std(along), base.su_along(h), rtol=0.06)
    np.testing.assert_allclose(np.std(values, axis=0), base.principal_values_su, rtol=0.06)
    document = base.to_dict()
    assert document["shift_isotropic_su"] == base.isotropic_su
    assert document["shift_su"] == base.total_su.tolist()


def test_the_isotropic_shift_is_as_uncertain_as_chi():
    """The dipolar part has no trace, and Lorentz and demagnetizing parts have opposite ones: K is all contact."""
    options = {"susceptibility": {"Mn": ld.Susceptibility(0.02, chi_su=0.001)}, "position": POINT}
    needle = ld.Sample.needle([0, 0, 1])
    found = ld.paramagnetic_shift(crystal(), **options, contact=ld.Contact(0.3, shell=1), sample=needle)
    assert found.isotropic_su == pytest.approx(0.05 * found.isotropic, rel=1e-9)
    assert ld.paramagnetic_shift(crystal(), **options, sample=needle).isotropic_su == pytest.approx(0, abs=1e-12)
    silent = ld.paramagnetic_shift(crystal(su=None), POINT, {"Mn": ld.Susceptibility(0.02)})
    assert np.isnan(silent.isotropic_su) and np.isnan(silent.total_su).all() and np.isnan(silent.su_along([1, 0, 0]))
    assert silent.to_dict()["shift_isotropic_su"] is None


def test_equal_principal_values_share_their_uncertainty():
    frame = principal_frame(np.diag([1.0, 1.0, -2.0]))
    step = np.array([[0.1, 0.3, 0], [0.3, -0.2, 0], [0, 0, 0.1]])
    found = frame.changes(step[None])[0]
    np.testing.assert_allclose(found, [-0.05, -0.05, 0.1], atol=1e-12)


# --- susceptibilities with an uncertainty


def test_tables_interpolate_their_uncertainty():
    table = ld.Susceptibility([0.03, 0.01, 0.02], "muB/T", temperatures_K=[50, 200, 100], chi_su=[3e-3, 1e-3, 2e-3])
    found = table.steps_of_atoms(crystal(), "Mn", 75)
    np.testing.assert_allclose(found[:, 0], np.array([1.5e-3, 1e-3])[:, None, None] * np.eye(3), atol=1e-15)
    at = table.steps_of_atoms(crystal(), "Mn", 200)
    np.testing.assert_allclose(np.sqrt((at**2).sum(axis=0))[0], 1e-3 * np.eye(3), atol=1e-15)
    one = dataclasses.replace(table, chi_su=0.002)
    np.testing.assert_allclose(one.chi_su, [0.002] * 3)
    curve = ld.shift_curve(crystal(su=None), POINT, {"Mn": table}, contact=CONTACT)
    np.testing.assert_allclose(curve.isotropic_su, 0.1 * np.abs(curve.isotropic), rtol=1e-9)


def test_elements_of_tensors_are_independent():
    two = ld.Crystal(CELL, SITES[:2], ["Mn", "Mn"])
    per_atom = ld.Susceptibility([CHI, 2 * CHI], "muB/T", chi_su=[CHI_SU, 0 * CHI_SU])
    steps = per_atom.steps_of_atoms(two, "Mn")
    np.testing.assert_allclose(np.sqrt((steps**2).sum(axis=0)), [CHI_SU, 0 * CHI_SU], atol=1e-15)
    shared = ld.Susceptibility(CHI, "muB/T", chi_su=CHI_SU).steps_of_atoms(two, "Mn")
    np.testing.assert_allclose(shared[:, 0], shared[:, 1])
    np.testing.assert_allclose(np.sqrt((shared**2).sum(axis=0))[0], CHI_SU, atol=1e-15)


def test_a_local_tensor_has_the_parameters_of_its_site():
    """Axial about [111] of a pyrochlore site: two parameters, turned with the axis of every atom."""
    corners = np.array([[0, 0, 0], [0, 0.25, 0.25], [0.25, 0, 0.25], [0.25, 0.25, 0]])
    fcc = np.array([[0, 0, 0], [0, 0.5, 0.5], [0.5, 0, 0.5], [0.5, 0.5, 0]])
    sites = (corners[None] + fcc[:, None]).reshape(-1, 3)
    crystal = ld.Crystal(10.1 * np.eye(3), sites, ["Dy"] * 16)
    axis = np.ones(3) / np.sqrt(3)
    su = np.full((3, 3), 0.03)
    local = ld.Susceptibility(0.1 * np.eye(3) + 3 * np.outer(axis, axis), "muB/T", local=True, chi_su=su)
    steps = local.steps_of_atoms(crystal, "Dy")
    assert len(steps) == 2
    np.testing.assert_allclose(np.sqrt((steps**2).sum(axis=0)), np.tile(su, (16, 1, 1)), atol=1e-12)
    axes = np.array([[1, 1, 1], [1, -1, -1], [-1, 1, -1], [-1, -1, 1]]) / np.sqrt(3)
    order = crystal.find("Dy")
    for row, site in enumerate(order):
        n = axes[site % 4]
        for step in steps[:, row]:
            across = step - (n @ step @ n) * np.outer(n, n)
            np.testing.assert_allclose(across, np.trace(across) / 2 * (np.eye(3) - np.outer(n, n)), atol=1e-12)


@pytest.mark.parametrize(
    ("arguments", "message"),
    [
        ({"chi": 0.1, "chi_su": -0.1}, "chi_su must hold numbers of at least 0, got -0.1."),
        ({"chi": 0.1, "chi_su": 1e300}, "chi_su must hold numbers of at most 1e+06, got 1e+300."),
        ({"chi": CHI, "chi_su": 0.1}, "chi_su must have shape (3, 3), got ()."),
        ({"chi": CHI, "chi_su": np.triu(CHI_SU)}, "chi_su must be symmetric, as chi is."),
        ({"chi": [0.1, 0.2], "temperatures_K": [1, 2], "chi_su": [0.1]}, "chi_su must have shape (2), got (1,)."),
        ({"chi": 0.1, "chi_su": "small"}, "chi_su must be a finite number, got 'small'."),
    ],
)
def test_uncertainties_that_mean_nothing(arguments, message):
    with pytest.raises(InputError) as caught:
        ld.Susceptibility(**arguments)
    assert str(caught.value) == message


@pytest.mark.parametrize(
    ("position", "options", "message"),
    [
        (POINT, {"position_su": (0, -0.1, 0)}, "position_su must hold numbers of at least 0, got [0.0, -0.1, 0.0]."),
        (POINT, {"position_su": (0, 0.1)}, "position_su must have shape (3), got (2,)."),
        (SITES[1], {"position_su": (0, 0.1, 0)}, "position_su goes with a position of its own; this one is that of "
         "atom Fe and has the uncertainty of that site."),
        (POINT, {"spread": -0.1}, "spread (rms displacement along each axis in Å) must lie between 0.0 and 5.0, got "
         "-0.1."),
        (POINT, {"spread": np.diag([1.0, 0, 1.0])}, "the point: its spread is flat (less than 0.001 Å along one "
         "direction) and reaches atom Mn, where the average of a dipole field over a plane or a line has no finite "
         "value. Give the spread an extent along every direction."),
    ],
)  # fmt: skip
def test_refusals(position, options, message):
    with pytest.raises(InputError) as caught:
        ld.coupling_tensor(crystal(), position, magnetic="Mn", **options)
    assert str(caught.value) == message
