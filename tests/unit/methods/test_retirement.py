import numpy as np
import pytest

from keelbook.methods.retirement import lives, survival


@pytest.mark.parametrize(
    ("mean_life", "which", "masses"), [(7, [7], [1]), (7.25, [7, 8], [0.75, 0.25]), (1, [1], [1])]
)
def test_simultaneous_keeps_the_mean_life(mean_life, which, masses):
    found, mass = lives("simultaneous", mean_life)
    assert found.tolist() == which
    np.testing.assert_allclose(mass, masses)
    assert found @ mass == pytest.approx(mean_life)


def test_an_asset_is_in_use_until_its_life_is_reached():
    which, masses = lives("simultaneous", 2.25)
    ages = np.array([0, 1.5, 1.999, 2, 2.5, 3, 3.5])
    np.testing.assert_allclose(survival(which, masses, ages), [1, 1, 1, 0.25, 0.25, 0, 0])


def test_refusals():
    with pytest.raises(ValueError, match="expected one of simultaneous"):
        lives("simultanous", 7)
    with pytest.raises(ValueError, match=r"mean life is 0\.5"):
        lives("simultaneous", 0.5)
