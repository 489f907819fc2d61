"""Published and defined values of the distance room, each with its source."""

import math

import numpy as np
import pytest

from reduce.candles.budget import total_error
from reduce.candles.distance import (
    flat_lcdm_modulus,
    fractional_distance_error,
    h0_magnitude_shift,
    hubble_modulus,
    modulus_to_mpc,
    mpc_to_modulus,
    mpc_with_errors,
    peculiar_velocity_modulus_error,
    rest_phase,
)
from reduce.candles.model import type_ia_model
from reduce.candles.reddening import milky_way_extinction, to_sf11
from reduce.records import BudgetLine


@pytest.mark.parametrize(
    ("band", "per_sfd"),
    [
        # SF-01, SF-02: Schlafly & Finkbeiner 2011 (ApJ 737, 103), Table 6, R_V = 3.1: A_b per unscaled SFD E(B-V)
        ("B", 3.626), ("V", 2.742), ("R", 2.169), ("I", 1.505),  # Landolt
        ("g", 3.303), ("r", 2.285), ("i", 1.698),  # SDSS
    ],
)  # fmt: skip
def test_extinction_per_unscaled_reddening(band, per_sfd):
    assert milky_way_extinction(band, 1.0, "SFD") == pytest.approx(per_sfd, abs=0.0005)


@pytest.mark.parametrize(("band", "expected"), [("B", 0.3532), ("V", 0.2671), ("R", 0.2113), ("I", 0.1466)])
def test_extinction_of_a_real_line_of_sight(band, expected):
    # SF-04: arithmetic with Table 6 of Schlafly & Finkbeiner 2011: E_SFD = 0.0974 = 0.0838 / 0.86
    assert milky_way_extinction(band, 0.0974, "SFD") == pytest.approx(expected, abs=1e-4)
    assert milky_way_extinction(band, 0.0838, "SF11") == pytest.approx(expected, abs=2e-4)


def test_recalibrated_scale():
    # SF-05: abstract of Schlafly & Finkbeiner 2011: a 14 % recalibration of the 1998 map
    assert to_sf11(0.100, "SFD") == pytest.approx(0.0860, abs=1e-4)
    assert to_sf11(0.086, "SF11") == 0.086


@pytest.mark.parametrize("band", ["B", "V", "R", "I", "g", "r", "i"])
def test_the_models_coefficients_belong_to_the_recalibrated_scale(band):
    # Table 6 of Schlafly & Finkbeiner 2011 uses the law of Fitzpatrick 1999, the model that of
    # Cardelli, Clayton & Mathis 1989: they agree to 8 % on one scale and not on the other
    coefficient = type_ia_model().mw_coefficients[band]
    assert milky_way_extinction(band, 1.0, "SF11") == pytest.approx(coefficient, rel=0.08)
    assert milky_way_extinction(band, 1.0, "SFD") != pytest.approx(coefficient, rel=0.08)


def test_decline_rate_is_counted_in_rest_frame_days():
    # DM15-01: definition: m = 12 + 0.0049 t_rest², at z = 0.02 15 rest days are 15.30 observed days and Δm15 = 1.1025
    assert rest_phase(55000.0 + 15.30, 55000.0, 0.02) == pytest.approx(15.0, abs=1e-9)
    assert 0.0049 * rest_phase(55015.30, 55000.0, 0.02) ** 2 == pytest.approx(1.1025, abs=1e-4)


def test_time_dilation():
    # TD-01: definition: 15 rest days at z = 0.05 last 15.75 d
    assert rest_phase(15.75, 0.0, 0.05) == pytest.approx(15.0, abs=1e-6)


@pytest.mark.parametrize("dm15", [0.8, 0.95, 1.1, 1.33, 1.6])
def test_templates_are_named_by_their_decline_rate(dm15):
    # definition of Phillips 1993 (ApJ 413, L105): B fades by Δm15 in 15 d after B maximum
    mag = type_ia_model().standard_mag("B", np.array([0.0, 15.0]), np.array([dm15]), 0.0)[:, 0]
    assert mag[1] - mag[0] == pytest.approx(dm15, abs=0.01)
    near = type_ia_model().standard_mag("B", np.array([-1.0, 0.0, 1.0]), np.array([dm15]), 0.0)[:, 0]
    assert near[1] == near.min()


def test_k_corrections_near_maximum_are_small_and_grow_after_it():
    # from memory: in B and V at peak |K| stays within about 0.02 for z < 0.01; in B about 0.05 at +20 d,
    # z = 0.02
    model = type_ia_model()
    for band in ("B", "V"):
        assert abs(float(model.k_correction(band, 0.01, np.array([0.0]))[0])) < 0.02
    assert 0.0 < float(model.k_correction("B", 0.02, np.array([20.0]))[0]) < 0.08
    assert all(abs(model.k_correction(band, 0.0, model.phases)).max() == 0.0 for band in model.bands)


def test_modulus_and_distance():
    # DM-01: definition: μ = 29.178 is 6.84857 Mpc
    assert modulus_to_mpc(29.178) == pytest.approx(6.84857, abs=1e-4)
    # DM-02: Pietrzynski et al. 2019 (Nature 567, 200): the Large Magellanic Cloud at 49.59 kpc
    assert mpc_to_modulus(0.04959) == pytest.approx(18.47697, abs=1e-4)
    # DM-03: arithmetic, ln(10)/5
    assert fractional_distance_error(0.15) == pytest.approx(0.06908, abs=1e-5)


def test_a_textbook_supernova():
    # common practice: m_B = 14.0 at maximum and M_B = -19.5 give μ = 33.5 and 50.1 Mpc
    mu = 14.0 - -19.5
    assert mu == 33.5
    distance, up, down = mpc_with_errors(mu, 0.15)
    assert distance == pytest.approx(50.1, abs=0.05)
    assert up > down > 0
    assert (up + down) / 2.0 / distance == pytest.approx(fractional_distance_error(0.15), rel=0.01)


def test_a_normal_supernova_peaks_where_common_practice_says():
    # common practice: a normal type Ia peaks at M_B of about -19.3 to -19.5 (no host dust, H0 65 to 73)
    assert float(type_ia_model().absolute_mag("B", 1.1)) == pytest.approx(-19.4, abs=0.2)
    # SH0ES/Pantheon+ 2022 standardised M_B = -19.253 on H0 = 73.04 (Riess et al. 2022, ApJ 934, L7)
    assert float(type_ia_model().absolute_mag("B", 1.1)) == pytest.approx(-19.253, abs=0.05)


@pytest.mark.parametrize(
    ("h0", "z", "mu", "distance"),
    [
        # COS-70-0.01 to COS-73.04-0.1: astropy.cosmology FlatLambdaCDM, Ω_m = 0.3, no radiation
        (70.0, 0.01, 33.17532, 43.1582), (70.0, 0.05, 36.73459, 222.2891), (70.0, 0.1, 38.31520, 460.2999),
        (73.04, 0.01, 33.08300, 41.3619), (73.04, 0.05, 36.64228, 213.0372), (73.04, 0.1, 38.22289, 441.1418),
    ],
)  # fmt: skip
def test_flat_cosmology_and_low_redshift_expansion_agree(h0, z, mu, distance):
    assert flat_lcdm_modulus(z, h0) == pytest.approx(mu, abs=2e-4)
    assert modulus_to_mpc(flat_lcdm_modulus(z, h0)) == pytest.approx(distance, rel=1e-4)
    assert hubble_modulus(z, h0, j0=1.0) == pytest.approx(mu, abs=0.0002 + 0.4 * z**3)


@pytest.mark.parametrize(("z", "mu"), [(0.01, 33.17538), (0.05, 36.73602)])
def test_hubble_law_to_second_order(z, mu):
    # HUB-0.01, HUB-0.05: d_L = cz/H0 [1 + (1 - q0) z/2], H0 = 70, q0 = -0.55
    assert hubble_modulus(z, 70.0, -0.55) == pytest.approx(mu, abs=1e-5)


def test_peculiar_velocity():
    # PEC-01: 5/ln(10) · 250 km/s / cz at z = 0.01
    assert peculiar_velocity_modulus_error(0.01, 250.0) == pytest.approx(0.1811, abs=1e-4)


def test_scales_of_h0():
    # H0S-01: arithmetic: 5 log10(72/65)
    assert h0_magnitude_shift(65.0, 72.0) == pytest.approx(0.22210, abs=1e-5)
    # arithmetic: 5 log10(73.04/72)
    assert h0_magnitude_shift(72.0, 73.04) == pytest.approx(0.0311, abs=1e-4)


def test_error_budget_adds_in_quadrature():
    # BUD-01: arithmetic: σ_B 0.02; Δm15 ± 0.05 with slope 0.634; E ± 0.03 with R_B 4.1; intrinsic 0.15
    lines = [
        BudgetLine("peak", 0.02),
        BudgetLine("decline rate", 0.05 * 0.634),
        BudgetLine("host dust", 0.03 * 4.1),
        BudgetLine("intrinsic", 0.15),
    ]
    assert total_error(lines) == pytest.approx(0.1976, abs=1e-4)
    assert math.isclose(total_error([]), 0.0)


@pytest.mark.parametrize("bad", [0.0, -1.0, math.nan])
def test_impossible_distances_are_refused(bad):
    with pytest.raises(ValueError, match="positive"):
        mpc_to_modulus(bad)
    with pytest.raises(ValueError, match="positive"):
        hubble_modulus(bad)
