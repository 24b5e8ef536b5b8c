"""Second moments and widths from nuclear moments, and the r⁻⁶ sums behind them."""

from __future__ import annotations

import itertools

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy import constants
from scipy.integrate import quad
from scipy.special import betainc

import latticedip as ld
from latticedip.errors import InputError
from latticedip.particles import particle_named
from latticedip.sums.powers import direction_sum, power_tensors
from tests.reference.cells import random_cell, random_rotation

FCC = np.array([[0, 0, 0], [0, 0.5, 0.5], [0.5, 0, 0.5], [0.5, 0.5, 0]])
#: (µ0/4π) µ_N/Å³ in T.
NUCLEAR_T = constants.mu_0 / (4 * np.pi) * constants.value("nuclear magneton") * 1e30


def direct_power_tensor(cell, offset, radius: float, order: int = 12) -> np.ndarray:
    """Σ n_a n_b n_c n_d r⁻⁶ by points within a sphere with a softened rim, and its exact isotropic tail.

    Where the weight w(r) depends on the distance alone, the part left out is the integral of (1 − w) r⁻⁶ over the
    uniform density up to terms that fall with a high power of the radius; over directions n_a n_b n_c n_d averages to
    (δδ + δδ + δδ)/15.
    """
    inner = 0.2 * radius

    def weight(r):
        return 1.0 - betainc(order + 1, order + 1, np.clip((r - inner) / (radius - inner), 0.0, 1.0))

    cell = np.asarray(cell, dtype=float)
    reach = np.ceil((radius + np.linalg.norm(offset)) * np.linalg.norm(np.linalg.inv(cell), axis=0)).astype(int)
    grid = np.stack(np.meshgrid(*[np.arange(-n, n + 1) for n in reach], indexing="ij"), axis=-1).reshape(-1, 3)
    r = np.asarray(offset) - grid @ cell
    length = np.linalg.norm(r, axis=1)
    near = (length < radius) & (length > 1e-6)
    n, length = r[near] / length[near, None], length[near]
    terms = weight(length) * length**-6
    total = np.einsum("i,ia,ib,ic,id->abcd", terms, n, n, n, n, optimize=True)
    middle = quad(lambda s: (1 - weight(s)) / s**4, inner, radius, epsabs=0, epsrel=1e-12, limit=200)[0]
    tail = 4 * np.pi / abs(np.linalg.det(cell)) * (middle + radius**-3 / 3)
    delta = np.eye(3)
    pairs = np.einsum("ab,cd->abcd", delta, delta)
    return total + tail / 15 * (pairs + pairs.transpose(0, 2, 1, 3) + pairs.transpose(0, 2, 3, 1))


@pytest.mark.parametrize(
    ("cell", "offset"),
    [
        (np.eye(3), (0, 0, 0)),
        (np.eye(3), (0.2, 0.5, -0.1)),
        (np.diag([1.0, 1.4, 2.0]), (0.4, 0.3, 0.9)),
        (np.array([[1.0, 0, 0], [0.3, 1.1, 0], [-0.2, 0.4, 1.3]]), (0.31, -0.2, 0.5)),
        (np.array([[1.0, 0, 0], [0.9, 0.5, 0], [0.2, 0.4, 1.3]]), (2.31, -1.2, 4.5)),
    ],
)
def test_power_sum_against_a_direct_sum_with_its_tail(cell, offset):
    wanted = direct_power_tensor(cell, offset, 28.0)
    found = power_tensors(cell, [offset])[0]
    assert np.abs(found - wanted).max() < 1e-9 * np.einsum("aabb", wanted)


@pytest.mark.parametrize("seed", range(12))
def test_power_sum_in_hard_cells_is_symmetric_and_independent_of_the_cut_offs(seed):
    """Cells to 1:100 and 20°: nine digits survive a coarser tolerance as promised, and a turned, re-based cell."""
    rng = np.random.default_rng(seed)
    cell = random_cell(rng)
    offset = rng.uniform(-1, 1, 3) @ cell
    fine, coarse = power_tensors(cell, [offset], tol=1e-14)[0], power_tensors(cell, [offset], tol=1e-6)[0]
    size = np.einsum("aabb", fine)
    assert np.abs(fine - coarse).max() < 1e-6 * size
    turn = random_rotation(rng)
    other = np.array([[1, 1, 0], [0, 1, 0], [2, -1, 1]]) @ cell
    turned = power_tensors(other @ turn.T, [turn @ (offset + cell[1])])[0]
    back = np.einsum("abcd,ai,bj,ck,dl->ijkl", turned, turn, turn, turn, turn)
    assert np.abs(back - fine).max() < 1e-9 * size
    # Three cells in one have another splitting and other cut-offs.
    triple = power_tensors(cell * [[3], [1], [1]], [offset, offset + cell[0], offset + 2 * cell[0]]).sum(axis=0)
    assert np.abs(triple - fine).max() < 1e-9 * size
    for order in itertools.permutations(range(4)):
        assert np.array_equal(fine, fine.transpose(order))


def test_sources_left_out_are_left_out_whole():
    cell = np.diag([3.0, 3.5, 4.0])
    offset = np.array([0.05, 0.02, -0.03])
    length = np.linalg.norm(offset)
    n = offset / length
    pair = np.einsum("a,b,c,d->abcd", n, n, n, n) / length**6
    whole = power_tensors(cell, [offset])[0]
    rest = power_tensors(cell, [offset], leave_out_A=0.1)[0]
    # 1e-16 of the pair term is all that the difference can show.
    assert np.abs(whole - pair - rest).max() < 1e-14 * np.abs(pair).max()
    # Near the lattice point the rest is that on it, but for terms of second order.
    assert rest == pytest.approx(power_tensors(cell, [[0, 0, 0]])[0], rel=0.05, abs=1e-4)


def test_direction_sum_of_one_pair():
    n = np.array([[[0.0, 0.6, 0.8]]])[0, 0]
    tensor = np.einsum("a,b,c,d->abcd", n, n, n, n) / 2.0**6
    magic = np.array([np.sqrt(2), 0.6, 0.8]) / np.sqrt(3)
    assert direction_sum(tensor, n) == pytest.approx(4 / 64)
    assert direction_sum(tensor, np.array([1.0, 0, 0])) == pytest.approx(1 / 64)
    assert direction_sum(tensor, magic) == pytest.approx(0, abs=1e-17)


def pair_crystal(first: str, second: str, distance: float, pbc: bool = False, occupancy: float = 1.0) -> ld.Crystal:
    """Two atoms along z, alone or in a cell so large that only they count."""
    edge = 4000.0
    return ld.Crystal(
        edge * np.eye(3), [[0, 0, 0], [0, 0, distance / edge]], [first, second], ["A1", "B1"], [1.0, occupancy],
        (pbc,) * 3,
    )  # fmt: skip


@pytest.mark.parametrize("pbc", [False, True])
def test_one_unlike_neighbour(pbc):
    """The muon sees the field (µ0/4π) (µ/I) I_z (3cos²θ − 1)/r³ of a fluorine: 19F has I = 1/2."""
    fluorine = ld.linewidth(pair_crystal("Au", "F", 1.9, pbc), (0, 0, 0), particle="muon", nuclei="F")
    moment = particle_named("19F").moment_nuclear_magnetons
    rms_T = NUCLEAR_T * moment / 1.9**3
    assert fluorine.second_moment_along([0, 0, 1]) == pytest.approx((2 * rms_T) ** 2, rel=1e-9)
    assert fluorine.second_moment_along([1, 0, 0]) == pytest.approx(rms_T**2, rel=1e-9)
    assert fluorine.second_moment_T2 == pytest.approx(4 / 5 * rms_T**2, rel=1e-9)
    assert fluorine.zero_tensor_T2 == pytest.approx(rms_T**2 * np.diag([1, 1, 4]), rel=1e-9, abs=1e-20)
    gamma = 2 * np.pi * 135.53881
    assert fluorine.transverse_width_per_us == pytest.approx(gamma * rms_T * np.sqrt(0.8), rel=1e-7)
    assert fluorine.zero_field_width_per_us == pytest.approx(gamma * rms_T * np.sqrt(2), rel=1e-7)
    along = ld.linewidth(pair_crystal("Au", "F", 1.9), (0, 0, 0), particle="muon", nuclei="F", direction=[0, 0, 2])
    # A polarization along the bond feels only the two components across.
    assert along.zero_field_width_per_us == pytest.approx(gamma * rms_T, rel=1e-7)
    assert along.transverse_width_per_us == pytest.approx(2 * gamma * rms_T, rel=1e-7)


def test_a_monte_carlo_of_random_spins_agrees():
    """Mean squares over random orientations of the vector model, |I|² = I(I+1)."""
    rng = np.random.default_rng(5)
    cell = np.array([[4.0, 0, 0], [0.4, 5.0, 0], [0.2, 0.3, 6.0]])
    crystal = ld.Crystal(cell, [[0.1, 0.2, 0.3], [0.6, 0.5, 0.2], [0.3, 0.8, 0.7]], ["Al", "Na", "Na"], pbc=[False] * 3)
    found = ld.linewidth(crystal, (0.5, 0.9, 0.4), particle="muon")
    field = np.zeros((200_000, 3))
    # 27Al 3.6415 µ_N, I = 5/2; 23Na 2.2176 µ_N, I = 3/2: both the only isotopes (Stone, INDC(NDS)-0794 (2019)).
    for position, (moment, spin) in zip(
        crystal.positions, [(3.6415, 2.5), (2.21750, 1.5), (2.21750, 1.5)], strict=True
    ):
        r = (np.array([0.5, 0.9, 0.4]) - position) @ cell
        n = r / np.linalg.norm(r)
        direction = rng.normal(size=field.shape)
        spins = np.sqrt(spin * (spin + 1)) * direction / np.linalg.norm(direction, axis=1)[:, None]
        scale = NUCLEAR_T * moment / spin / np.linalg.norm(r) ** 3
        field += scale * (3 * (spins @ n)[:, None] * n - spins)
    assert found.zero_tensor_T2 == pytest.approx(field.T @ field / len(field), rel=0.02, abs=0.01 * np.var(field))
    for h in np.eye(3):
        assert found.second_moment_along(h) <= found.zero_tensor_T2.trace()


@pytest.mark.parametrize("pbc", [False, True])
def test_like_spins_count_nine_quarters(pbc):
    like = ld.linewidth(pair_crystal("F", "F", 2.7, pbc), (0, 0, 0), particle="19F", direction=[0, 0, 1])
    unlike = ld.linewidth(pair_crystal("H", "F", 2.7, pbc), (0, 0, 0), particle="1H", direction=[0, 0, 1], nuclei="19F")
    assert like.second_moment_T2 == pytest.approx(9 / 4 * unlike.second_moment_T2, rel=1e-9)
    assert like.contributions[0].like
    assert like.zero_field_width_per_us is None
    assert like.to_dict()["zero_field_width_per_us"] is None


def test_isotopes_add_up_with_their_abundances():
    cu = ld.Crystal(3.615 * np.eye(3), FCC, ["Cu"] * 4)
    both = ld.linewidth(cu, (0.5, 0.5, 0.5), particle="muon")
    one, other = (ld.linewidth(cu, (0.5, 0.5, 0.5), particle="muon", nuclei=[name]) for name in ("63Cu", "65Cu"))
    assert both.second_moment_T2 == pytest.approx(one.second_moment_T2 + other.second_moment_T2, rel=1e-12)
    assert [part.isotope for part in both.contributions] == ["63Cu", "65Cu"]
    assert sum(part.atoms_per_cell for part in both.contributions) == pytest.approx(4, abs=1e-3)
    pure = ld.linewidth(cu, (0.5, 0.5, 0.5), particle="muon", abundances={"63Cu": 1.0})
    assert pure.second_moment_T2 * 0.6915 == pytest.approx(one.second_moment_T2, rel=2e-3)
    assert len(pure.contributions) == 1
    # A copper nucleus as probe: its own isotope is like, the other one is not.
    probe = ld.linewidth(cu, (0, 0, 0), particle="65Cu")
    assert [(part.isotope, part.like) for part in probe.contributions] == [("63Cu", False), ("65Cu", True)]


def test_occupancy_scales_the_second_moment():
    full, third = (
        ld.linewidth(pair_crystal("Au", "F", 2.0, True, p), (0, 0, 0), particle="muon", nuclei="F")
        for p in (1.0, 1 / 3)
    )
    assert third.second_moment_T2 == pytest.approx(full.second_moment_T2 / 3, rel=1e-12)
    assert third.zero_field_width_per_us == pytest.approx(full.zero_field_width_per_us / np.sqrt(3), rel=1e-12)


def test_dilute_spins_say_so():
    silicon = ld.Crystal(5.43 * np.eye(3), np.vstack([FCC, FCC + 0.25]), ["Si"] * 8)
    assert ld.linewidth(silicon, (0, 0, 0), particle="29Si").notes[-1] == (
        "29Si sits on 4.67 % of the Si places only: the line of dilute spins is narrower than its second moment says "
        "(Kittel and Abrahams 1953)"
    )


def test_an_atom_that_shares_the_place_of_the_probe_does_not_act():
    mixed = ld.Crystal(
        4.0 * np.eye(3),
        [[0, 0, 0], [0.01, 0, 0], [0.5, 0.5, 0.5]],
        ["F", "H", "F"],
        ["X1", "X2", "F2"],
        [0.5, 0.5, 1.0],
    )
    alone = ld.Crystal(4.0 * np.eye(3), [[0, 0, 0], [0.5, 0.5, 0.5]], ["F", "F"], ["X1", "F2"], [0.5, 1.0])
    one = ld.linewidth(mixed, (0, 0, 0), particle="19F", nuclei="F").second_moment_T2
    assert one == pytest.approx(ld.linewidth(alone, (0, 0, 0), particle="19F").second_moment_T2, rel=1e-12)
    # The hydrogen of all other cells acts: half of a simple cubic sum of unlike spins, nearly.
    other = ld.linewidth(mixed, (0, 0, 0), particle="19F", nuclei="1H").second_moment_T2
    wanted = 0.5 * 4 / 5 * 8.40192397 / 4.0**6 * (NUCLEAR_T * 2.792847345) ** 2
    assert other == pytest.approx(wanted, rel=1e-2)


@settings(max_examples=15, deadline=None)
@given(seed=st.integers(0, 10**6))
def test_powder_is_the_average_over_directions_and_origin_and_rotation_do_not_matter(seed):
    rng = np.random.default_rng(seed)
    cell = np.diag(rng.uniform(4, 6, 3)) + rng.uniform(-1, 1, (3, 3))
    positions = np.array([[0.1, 0.1, 0.1], [0.6, 0.4, 0.2], [0.3, 0.7, 0.8]]) + rng.uniform(0, 0.05, (3, 3))
    point = np.array([0.8, 0.05, 0.55])
    symbols = ["F", "Na", "Al"]
    base = ld.linewidth(ld.Crystal(cell, positions, symbols), point, particle="muon")
    # Six icosahedral axes average polynomials of degree four exactly.
    golden = (1 + np.sqrt(5)) / 2
    axes = [[0, 1, golden], [0, -1, golden], [1, golden, 0], [-1, golden, 0], [golden, 0, 1], [golden, 0, -1]]
    mean = np.mean([base.second_moment_along(axis) for axis in axes])
    assert mean == pytest.approx(base.second_moment_T2, rel=1e-12)
    assert base.zero_field_width_per_us**2 / base.transverse_width_per_us**2 == pytest.approx(5 / 2, rel=1e-12)
    turn, shift = random_rotation(rng), rng.uniform(-2, 2, 3)
    turned = ld.linewidth(ld.Crystal(cell @ turn.T, positions + shift, symbols), point + shift, particle="muon")
    h = rng.normal(size=3)
    assert turned.second_moment_along(turn @ h) == pytest.approx(base.second_moment_along(h), rel=1e-9)
    assert turned.zero_tensor_T2 == pytest.approx(turn @ base.zero_tensor_T2 @ turn.T, rel=1e-9, abs=1e-18)


def test_supercell_gives_the_same():
    cell = np.diag([4.0, 4.5, 5.0])
    small = ld.Crystal(cell, [[0, 0, 0], [0.5, 0.4, 0.6]], ["Na", "F"], occupancies=[1, 0.7])
    big = ld.Crystal(
        cell * [[2], [1], [1]], [[0, 0, 0], [0.25, 0.4, 0.6], [0.5, 0, 0], [0.75, 0.4, 0.6]], ["Na", "F"] * 2,
        occupancies=[1, 0.7] * 2,
    )  # fmt: skip
    one = ld.linewidth(small, (0, 0, 0), particle="23Na", direction=[1, 2, 3])
    two = ld.linewidth(big, (0.5, 0, 0), particle="23Na", direction=[1, 2, 3])
    assert two.second_moment_T2 == pytest.approx(one.second_moment_T2, rel=1e-11)


@pytest.mark.parametrize(
    "change",
    [{"factor": 1.05}, {"outward_A": -0.1}, {"vector_A": [0.05, 0.02, -0.1]}],
)
def test_displaced_neighbours_against_moved_atoms(change):
    """In a cluster the neighbours can be moved by hand."""
    cell = 20 * np.eye(3)
    cart = np.array([[1.9, 0, 0], [-1.9, 0, 0], [0, 2.6, 0], [0, 0, 3.0]])
    symbols = ["F", "F", "Na", "F"]

    def moved(r):
        if "factor" in change:
            return r * change["factor"]
        if "outward_A" in change:
            return r * (1 + change["outward_A"] / np.linalg.norm(r))
        return r + np.array(change["vector_A"])

    rigid = ld.Crystal(cell, cart / 20, symbols, pbc=[False] * 3)
    relaxed = ld.Crystal(cell, np.array([moved(cart[0]), moved(cart[1]), *cart[2:]]) / 20, symbols, pbc=[False] * 3)
    wanted = ld.linewidth(relaxed, (0, 0, 0), particle="muon")
    found = ld.linewidth(rigid, (0, 0, 0), particle="muon", displaced=ld.Displaced(shell=1, **change))
    assert found.strong_tensor_T2 == pytest.approx(wanted.strong_tensor_T2, rel=1e-12, abs=1e-22)
    one_by_one = [ld.Displaced(atom=(i, (0, 0, 0)), **change) for i in (0, 1)]
    again = ld.linewidth(rigid, (0, 0, 0), particle="muon", displaced=one_by_one)
    assert again.strong_tensor_T2 == pytest.approx(found.strong_tensor_T2, rel=1e-12, abs=1e-22)
    within = ld.linewidth(rigid, (0, 0, 0), particle="muon", displaced=ld.Displaced(within=1.95, **change))
    assert within.strong_tensor_T2 == pytest.approx(found.strong_tensor_T2, rel=1e-12, abs=1e-22)


def test_displacing_one_element_or_back_again():
    cu = ld.Crystal(3.615 * np.eye(3), FCC, ["Cu"] * 4)
    rigid = ld.linewidth(cu, (0.5, 0.5, 0.5), particle="muon")
    still = ld.linewidth(cu, (0.5, 0.5, 0.5), particle="muon", displaced=ld.Displaced(shell=2, factor=1.0))
    assert still.second_moment_T2 == pytest.approx(rigid.second_moment_T2, rel=1e-14)
    salt = ld.Crystal(4.6 * np.eye(3), np.vstack([FCC, FCC + np.array([0.5, 0, 0])]), ["Na"] * 4 + ["F"] * 4)
    # Seen from (¼, ¼, ¼) four Na and four F are equally near.
    of_f = ld.linewidth(salt, (0.25, 0.25, 0.25), particle="muon", displaced=ld.Displaced(shell=1, of="F", factor=0.9))
    of_all = ld.linewidth(salt, (0.25, 0.25, 0.25), particle="muon", displaced=ld.Displaced(shell=1, factor=0.9))
    plain = ld.linewidth(salt, (0.25, 0.25, 0.25), particle="muon")
    by = [{p.isotope: p.second_moment_T2 for p in w.contributions} for w in (plain, of_f, of_all)]
    assert by[1]["23Na"] == pytest.approx(by[0]["23Na"], rel=1e-12)
    assert by[1]["19F"] == pytest.approx(by[2]["19F"], rel=1e-12)
    assert by[2]["23Na"] > by[0]["23Na"]


def test_like_spins_of_equivalent_sites_only():
    """Where inequivalent sites of the probe's isotope do not flip with it they count as unlike: a ninth less of 9."""
    crystal = ld.Crystal(np.diag([4.0, 4.0, 9.0]), [[0, 0, 0], [0.5, 0.5, 0.2], [0.5, 0.5, 0.8]], ["F"] * 3)
    assert len({tuple(np.round(x, 6)) for x in ld.orbit(crystal, (0.5, 0.5, 0.2))}) == 2
    together = ld.linewidth(crystal, (0.5, 0.5, 0.2), particle="19F", direction=[0, 0, 1])
    apart = ld.linewidth(crystal, (0.5, 0.5, 0.2), particle="19F", direction=[0, 0, 1], like="site")
    own, other = apart.contributions
    assert (own.isotope, own.like, own.atoms_per_cell) == ("19F", True, 2.0)
    assert (other.isotope, other.like, other.atoms_per_cell) == ("19F", False, 1.0)
    assert together.contributions[0].second_moment_T2 == pytest.approx(
        own.second_moment_T2 + 9 / 4 * other.second_moment_T2, rel=1e-12
    )
    # Of one kind each: the sums of crystals that hold one kind of site alone, the probe's place kept.
    lone = ld.Crystal(crystal.cell, [[0, 0, 0]], ["F"])
    unlike = ld.linewidth(lone, (0.5, 0.5, 0.2), particle="19F", direction=[0, 0, 1], like="site")
    assert other.second_moment_T2 == pytest.approx(unlike.second_moment_T2, rel=1e-12)
    assert not any("sits on" in note for note in apart.notes)
    # The field in zero field knows no flips, and a muon no like spins.
    np.testing.assert_allclose(apart.zero_tensor_T2, together.zero_tensor_T2, rtol=1e-12)
    widths = [ld.linewidth(crystal, (0.25, 0.5, 0), particle="muon", like=word) for word in ("isotope", "site")]
    assert widths[0].second_moment_T2 == widths[1].second_moment_T2
    with pytest.raises(InputError) as caught:
        ld.linewidth(crystal, (0, 0, 0), particle="19F", like="spin")
    assert str(caught.value) == 'like must be "isotope" or "site", got \'spin\'.'


def test_width_of_a_partly_occupied_crystal_is_that_of_random_ones():
    """⟨B²⟩ of 4000 random fillings of a finite cluster: the sum of squares, each with its occupancy."""
    rng = np.random.default_rng(11)
    places = rng.uniform(0, 1, (12, 3)) * 0.8 + 0.1
    occupancies = rng.uniform(0.1, 0.9, 12)
    edges, probe = 20 * np.eye(3), (0.5, 0.5, 0.02)
    whole = ld.Crystal(edges, places, ["F"] * 12, occupancies=occupancies, pbc=(False,) * 3)
    mean = ld.linewidth(whole, probe, particle="muon", direction=[0, 0, 1]).second_moment_T2
    single = np.array(
        [
            ld.linewidth(
                ld.Crystal(edges, place[None], ["F"], pbc=(False,) * 3), probe, particle="muon", direction=[0, 0, 1]
            ).second_moment_T2
            for place in places
        ]
    )
    filled = rng.uniform(size=(4000, 12)) < occupancies
    sums = filled @ single
    assert mean == pytest.approx(occupancies @ single, rel=1e-12)
    assert mean == pytest.approx(sums.mean(), abs=4 * sums.std() / np.sqrt(4000))


def test_result_as_a_dict():
    document = ld.linewidth(
        pair_crystal("Au", "F", 1.9), (0, 0, 0), particle="muon", nuclei="19F", direction=[0, 0, 3]
    ).to_dict()
    assert document["direction"] == [0, 0, 1]
    assert document["site"] == "A1"
    assert document["contributions"][0]["isotope"] == "19F"
    assert document["contributions"][0]["second_moment_T2"] == document["second_moment_T2"]
    assert document["root_second_moment_mT"] == pytest.approx(1e3 * np.sqrt(document["second_moment_T2"]))
    assert document["notes"] == ["the position is that of atom A1, which does not act on the probe"]
    foreign = ld.linewidth(pair_crystal("Au", "F", 1.9), (0, 0, 0), particle="1H")
    assert "the probe 1H takes the place of an atom of another element, A1" in foreign.notes


CU = ld.Crystal(3.615 * np.eye(3), FCC, ["Cu"] * 4, ["Cu1"] * 4)
CENTRE = (0.5, 0.5, 0.5)


@pytest.mark.parametrize(
    ("arguments", "message"),
    [
        ({"nuclei": "64Cu"}, "unknown particle '64Cu'. Did you mean '63Cu' or '65Cu'? Known are \"muon\" and the "
         'isotopes with a magnetic moment, mass number first, such as "19F".'),
        ({"nuclei": ["cu"]}, "nuclei: the crystal holds no 'cu'; its elements are Cu. Did you mean 'Cu'?"),
        ({"nuclei": ["19F"]}, "nuclei: the crystal holds no '19F'; its elements are Cu."),
        ({"abundances": {"19F": 1.0}}, "abundances: the crystal holds no nuclei '19F'; its elements are Cu."),
        ({"abundances": {"63Cu": 0.7, "65Cu": 0.4}}, "abundances of 63Cu, 65Cu add up to 1.1, more than 1."),
        ({"abundances": {"63Cu": 1.2}}, "abundance of 63Cu must lie between 0.0 and 1.0, got 1.2."),
        ({"direction": [0, 0, 0]}, "direction is the zero vector, which has no direction."),
        ({"particle": "moun"}, "unknown particle 'moun'. Did you mean 'muon'? Known are \"muon\" and the isotopes "
         'with a magnetic moment, mass number first, such as "19F".'),
        ({"position": (0.01, 0, 0)}, "position (0.01, 0, 0) lies 0.0362 Å from atom Cu1 at (0, 0, 0). A point must "
         "be at least 0.1 Å from every atom, or on a site (within 0.001 Å)."),
        ({"displaced": ld.Displaced(within=1.0, factor=2.0)}, "displaced: no atom lies within 1 Å of the probe."),
        ({"displaced": [ld.Displaced(shell=1, factor=2.0)] * 2}, "displaced: atom Cu1 in cell (0, 0, 0) is moved "
         "twice."),
        ({"displaced": ld.Displaced(shell=1, outward_A=-1.8)}, "displaced: atom Cu1 in cell (0, 0, 0) would lie "
         "0.0075 Å from the probe. Keep it at least 0.1 Å away."),
        ({"displaced": ld.Displaced(atom=(9, (0, 0, 0)), factor=2.0)}, "displaced: the crystal has 4 sites, there is "
         "no number 9."),
        ({"displaced": "shell 1"}, "displaced must hold Displaced objects, got 's'."),
    ],
)  # fmt: skip
def test_refusals(arguments, message):
    call = {"position": CENTRE, "particle": "muon", **arguments}
    with pytest.raises(InputError) as caught:
        ld.linewidth(CU, call.pop("position"), **call)
    assert str(caught.value).replace("cell (1, 0, 0)", "cell (0, 0, 0)") == message


@pytest.mark.parametrize(
    ("arguments", "message"),
    [
        ({"factor": 1.1}, "a Displaced needs exactly one of shell (1 is the nearest), within (a radius in Å) and "
         "atom (a site number and a cell)."),
        ({"shell": 1}, "a Displaced needs exactly one of factor, outward_A (Å) and vector_A (Cartesian, Å)."),
        ({"shell": 0, "factor": 1.1}, "shell must be a whole number of at least 1, got 0."),
        ({"atom": 3, "factor": 1.1}, "atom must be a site number (from 0) and a cell of three whole numbers, such as "
         "(2, (0, 0, 1)), got 3."),
        ({"atom": (1, (0, 0, 0)), "of": "Cu", "factor": 1.1}, "a Displaced that names one atom takes no label or "
         "element, got of = 'Cu'."),
    ],
)  # fmt: skip
def test_displacements_that_mean_nothing(arguments, message):
    with pytest.raises(InputError) as caught:
        ld.Displaced(**arguments)
    assert str(caught.value) == message


def test_layers_and_chains_are_refused():
    layer = ld.Crystal(3 * np.eye(3), [[0, 0, 0]], ["F"], pbc=(True, True, False))
    with pytest.raises(InputError) as caught:
        ld.linewidth(layer, (0, 0, 0), particle="19F")
    assert str(caught.value) == (
        "the structure is periodic along (True, True, False) only; linewidths are available for three periodic "
        "directions or none."
    )


def test_an_isotope_without_natural_abundance_needs_one():
    hydride = ld.Crystal(4 * np.eye(3), [[0, 0, 0]], ["H"])
    with pytest.raises(InputError) as caught:
        ld.linewidth(hydride, (0.5, 0.5, 0.5), particle="muon", nuclei="3H")
    assert str(caught.value) == "nuclei: 3H has no abundance here. Give it with abundances, such as {'3H': 1.0}."
    tritium = ld.linewidth(hydride, (0.5, 0.5, 0.5), particle="muon", nuclei="3H", abundances={"3H": 1.0})
    assert tritium.second_moment_T2 > 0
