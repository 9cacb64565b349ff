"""Transfer, delocalisation and excitation error as they are stated to users."""

import pytest

from fringespan.beam import Lens
from fringespan.judgement.lens_effects import LensEffects, lens_cautions, lens_effects, off_bragg_caution

SCHERZER_200KV = Lens(voltage_kv=200, cs_mm=1.0, defocus_nm=57.83)


def test_scherzers_defocus_transfers_spacings_coarser_than_the_point_resolution_with_one_sign():
    # O. Scherzer, J. Appl. Phys. 20 (1949) 20: the broad negative band, here down to 0.233 nm
    effects = lens_effects([1 / 0.4, 1 / 0.3, 1 / 0.24], SCHERZER_200KV)
    assert all(t < -0.1 for t in effects.transfer)
    assert lens_effects([1 / 0.22], SCHERZER_200KV).transfer[0] > 0.1


def test_delocalisation_is_the_published_difference():
    # |Cs lambda^3 g^3 - df lambda g|, H. Lichte, Ultramicroscopy 38 (1991) 13, lambda = 2.5079 pm
    (shift,) = lens_effects([1 / 0.2], SCHERZER_200KV).delocalisation_nm
    assert shift == pytest.approx(1e6 * 2.5079e-3**3 / 0.2**3 - 57.83 * 2.5079e-3 / 0.2, rel=1e-3)


def test_the_transfer_is_stated_for_each_peak_and_the_shift_of_the_strong_ones():
    effects = LensEffects((-0.5, 0.25, 0.9), (0.2, -0.3, 7.0))
    (stated,) = lens_cautions(effects, [100, 50, 3], 0.2, SCHERZER_200KV)
    assert stated.code == "lens-transfer"
    assert "1: -0.50, 2: +0.25, 3: +0.90" in stated.text
    assert "57.8 nm underfocus" in stated.text
    assert "by 0.20 to 0.30 nm" in stated.text


def test_a_strong_peak_far_from_its_crystal_warns():
    effects = LensEffects((-0.5, 0.25), (0.2, -3.1))
    codes = {c.code: c for c in lens_cautions(effects, [100, 50], 0.2, Lens(voltage_kv=300, cs_mm=0, defocus_nm=-20))}
    assert set(codes) == {"lens-transfer", "delocalised-fringes"}
    assert "up to 3.1 nm" in codes["delocalised-fringes"].text
    assert "near 3.39 nm underfocus" in codes["delocalised-fringes"].remedy
    assert "20 nm overfocus" in codes["lens-transfer"].text


@pytest.mark.parametrize(
    # lambda / (2 d^2): 60 kV 4.8661 pm, 300 kV 1.9687 pm (relativistic, published tables)
    ("d_nm", "voltage_kv", "stated"),
    [(0.1, 60, "0.24 1/nm"), (0.05, 300, "0.39 1/nm"), (0.2, 60, None), (0.1, 300, None)],
)
def test_a_reflection_far_off_the_ewald_sphere_is_named(d_nm, voltage_kv, stated):
    cautions = off_bragg_caution(d_nm, voltage_kv)
    assert [stated in caution.text for caution in cautions] == ([True] if stated else [])


def test_the_thickness_that_shows_the_reflection_is_one_over_its_excitation_error():
    assert "thinner than about 4.1 nm" in off_bragg_caution(0.1, 60)[0].text
