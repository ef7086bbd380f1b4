"""The authors' own table of heat load: McCune and Keon (2002), file testrad.xls."""

import numpy as np
import pytest

from terrasol.practice.heat_load import potential_radiation, regression

# Latitude, slope, aspect; equations 1 to 3 with the fold of radiation, then with that of heat.
# Equations 1 and 2 are logarithms. Level ground has no aspect. By the authors' erratum the paper
# too has -0.984 for equation 1 at 40, 30, 0.
TABLE = (
    ((40, 0, np.nan), (-0.255118, -0.201840, 0.957964), (-0.255118, -0.201840, 0.957964)),
    ((40, 30, 0), (-0.983775, -0.889010, 0.571045), (-0.627967, -0.626899, 0.641633)),
    ((40, 30, 180), (-0.019594, -0.004535, 1.053045), (0.053812, -0.001481, 0.982458)),
    ((60, 0, np.nan), (-0.676000, -0.561000, 0.743000), (-0.676000, -0.561000, 0.743000)),
    ((60, 30, 0), (-1.544942, -1.390586, 0.363004), (-1.140096, -1.083490, 0.433591)),
    ((60, 30, 180), (-0.245904, -0.198935, 0.845004), (-0.221537, -0.240865, 0.774417)),
)


@pytest.mark.parametrize("equation", [1, 2, 3])
@pytest.mark.parametrize(("place", "radiation", "heat"), TABLE)
def test_authors_table(place, radiation, heat, equation):
    # To the table's last digit.
    for fold, values in (("radiation", radiation), ("heat", heat)):
        got = regression(*place, equation=equation, fold=fold)
        assert got == pytest.approx(values[equation - 1], abs=1e-6)


def test_sum_of_a_year_in_the_authors_unit():
    # exp of the rows above: 0.3739, 0.9806 and 0.7748 MJ cm-2 yr-1.
    got = potential_radiation(40, [30, 30, 0], [0, 180, np.nan])
    np.testing.assert_allclose(got, [0.3739, 0.9806, 0.7748], atol=5e-5)
