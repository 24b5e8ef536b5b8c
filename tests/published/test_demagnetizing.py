"""Published demagnetizing factors, to the last digit printed."""

from __future__ import annotations

import math

import pytest

from latticedip.sample import Sample

# Ellipsoids of revolution. Source: J. A. Osborn, Phys. Rev. 67, 351 (1945); E. C. Stoner, Phil. Mag. 36, 803
# (1945); table in R. M. Bozorth, Ferromagnetism (1951); all from memory. Some entries are cut, not rounded
# (prolate 2 is 0.17356), so one whole unit of the last digit is allowed.
PROLATE_LONG_AXIS = {2: "0.1735", 5: "0.0558", 10: "0.0203", 20: "0.00675", 50: "0.00144", 100: "0.000430"}
OBLATE_SHORT_AXIS = {2: "0.5272", 5: "0.7505", 10: "0.8608"}
# The table prints 0.01472 for 50, a misprint: Osborn's closed form (below) gives 0.01532.
OBLATE_LONG_AXIS = {2: "0.2364", 5: "0.1248", 10: "0.0696", 20: "0.0369", 50: "0.01532", 100: "0.00776"}

# Rectangular prisms. Source: A. Aharoni, J. Appl. Phys. 83, 3432 (1998), formula from memory; these digits
# are confirmed by an independent surface-charge quadrature.
SQUARE_PRISM = {
    0.1: "0.8050776336",
    0.5: "0.4959220380",
    1.0: "0.3333333333",
    2.0: "0.1983161528",
    5.0: "0.0883157400",
    10.0: "0.0457311924",
}
PRISM_1_2_3 = ("0.5387903059", "0.2783917160", "0.1828179780")

# Cylinders, magnetometric, susceptibility 0, by length/diameter. Source: D.-X. Chen, J. A. Brug,
# R. B. Goldfarb, IEEE Trans. Magn. 27, 3601 (1991); R. I. Joseph, J. Appl. Phys. 37, 4639 (1966); all
# from memory.
CYLINDER = {
    0.01: "0.9650",
    0.1: "0.7967",
    0.2: "0.6802",
    0.5: "0.4745",
    1.0: "0.3116",
    2.0: "0.1819",
    5.0: "0.07991",
    10.0: "0.04119",
    50.0: "0.008438",
}


def assert_printed(value: float, printed: str, units: float = 0.51) -> None:
    """Compare with a printed number, to so many units of its last digit (a little over half: rounding)."""
    unit = 10.0 ** -len(printed.partition(".")[2])
    assert value == pytest.approx(float(printed), abs=units * unit, rel=0)


@pytest.mark.parametrize(("ratio", "printed"), PROLATE_LONG_AXIS.items())
def test_prolate_long_axis(ratio: float, printed: str) -> None:
    assert_printed(Sample.ellipsoid((1, 1, ratio)).demagnetizing_tensor[2, 2], printed, units=1)


@pytest.mark.parametrize(("ratio", "printed"), OBLATE_SHORT_AXIS.items())
def test_oblate_short_axis(ratio: float, printed: str) -> None:
    assert_printed(Sample.ellipsoid((ratio, ratio, 1)).demagnetizing_tensor[2, 2], printed, units=1)


@pytest.mark.parametrize(("ratio", "printed"), OBLATE_LONG_AXIS.items())
def test_oblate_long_axis(ratio: float, printed: str) -> None:
    assert_printed(Sample.ellipsoid((ratio, ratio, 1)).demagnetizing_tensor[0, 0], printed, units=1)


def test_closed_forms_of_osborn() -> None:
    prolate = (2 * math.log(2 + math.sqrt(3)) / math.sqrt(3) - 1) / 3
    assert Sample.ellipsoid((1, 1, 2)).demagnetizing_tensor[2, 2] == pytest.approx(prolate, rel=1e-14)
    for m in (2.0, 50.0):
        oblate = (m * m / math.sqrt(m * m - 1) * math.asin(math.sqrt(m * m - 1) / m) - 1) / (2 * (m * m - 1))
        assert Sample.ellipsoid((m, m, 1)).demagnetizing_tensor[0, 0] == pytest.approx(oblate, rel=1e-13)


@pytest.mark.parametrize(("ratio", "printed"), SQUARE_PRISM.items())
def test_square_prism(ratio: float, printed: str) -> None:
    assert_printed(Sample.prism((1, 1, ratio)).demagnetizing_tensor[2, 2], printed)


def test_prism_of_three_edges() -> None:
    tensor = Sample.prism((1, 2, 3)).demagnetizing_tensor
    for axis, printed in enumerate(PRISM_1_2_3):
        assert_printed(tensor[axis, axis], printed)


@pytest.mark.parametrize(("ratio", "printed"), CYLINDER.items())
def test_cylinder(ratio: float, printed: str) -> None:
    assert_printed(Sample.cylinder(1, ratio).demagnetizing_tensor[2, 2], printed)
