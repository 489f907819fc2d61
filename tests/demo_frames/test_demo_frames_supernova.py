"""The light curve against the published tables, and the scatter against its covariance."""

from __future__ import annotations

import numpy as np
import pytest

from demo_frames.scenario import read_scenario
from demo_frames.supernova import Supernova, draw_scatter, draw_supernova
from reduce.candles.model import type_ia_model

SCENARIO = read_scenario()


@pytest.mark.parametrize(
    ("band", "absolute"),
    [
        # M_X at decline rate 1.1: constants of reduce/candles/tables/type_ia_params.json
        ("B", -19.2443),
        ("V", -19.1634),
        ("R", -19.1062),
        ("I", -18.7956),
    ],
)
def test_maximum_without_dust(band: str, absolute: float) -> None:
    supernova = Supernova(mu=33.0, z=0.0, t_max=60000.0, dm15=1.1, e_host=0.0, ebv_mw=0.0)
    assert supernova.mag(band, 60000.0, 0) == pytest.approx(33.0 + absolute, abs=1e-9)


def test_decline_after_fifteen_days_is_the_decline_rate() -> None:
    supernova = Supernova(mu=33.0, z=0.0, t_max=60000.0, dm15=1.3, e_host=0.0, ebv_mw=0.0)
    faded = supernova.mag("B", 60015.0, 0) - supernova.mag("B", 60000.0, 0)
    # T_B(15, D) = D by definition of the tables
    assert faded == pytest.approx(1.3, abs=1e-6)


def test_dust_and_time_dilation() -> None:
    bare = Supernova(mu=33.0, z=0.0, t_max=60000.0, dm15=1.1, e_host=0.0, ebv_mw=0.0)
    dusty = Supernova(mu=33.0, z=0.0, t_max=60000.0, dm15=1.1, e_host=0.1, ebv_mw=0.05)
    # R of host 2.862 and of the Milky Way 4.109 in B: reduce/candles/tables/type_ia_params.json
    assert dusty.mag("B", 60003.0, 0) - bare.mag("B", 60003.0, 0) == pytest.approx(0.2862 + 0.20545, abs=1e-9)
    far = Supernova(mu=33.0, z=0.02, t_max=60000.0, dm15=1.1, e_host=0.0, ebv_mw=0.0)
    model = type_ia_model()
    k_term = float(model.k_correction("B", 0.02, np.array([15.0]))[0])
    k_zero = float(model.k_correction("B", 0.02, np.array([0.0]))[0])
    # At 15 rest-frame days it has faded by the decline rate and the difference of K-corrections.
    faded = far.mag("B", 60000.0 + 15.0 * 1.02, 0) - far.mag("B", 60000.0, 0)
    assert faded == pytest.approx(1.1 + k_term - k_zero, abs=1e-6)


def test_parameters_lie_inside_the_scenario() -> None:
    drawn = [draw_supernova(SCENARIO, seed, scatter=False) for seed in range(50)]
    scene = SCENARIO.supernova
    for supernova in drawn:
        assert scene.mu[0] <= supernova.mu <= scene.mu[1]
        assert scene.dm15[0] <= supernova.dm15 <= scene.dm15[1]
        assert scene.e_host[0] <= supernova.e_host <= scene.e_host[1]
        assert not supernova.scatter_mag
        # 73.04 km/s/Mpc and 5 sigma of 250 km/s
        hubble_kms = 73.04 * 10 ** (0.2 * (supernova.mu - 25))
        assert abs(299792.458 * supernova.z - hubble_kms) < 1250
    assert len({supernova.mu for supernova in drawn}) == 50


def test_scatter_leaves_the_parameters_alone() -> None:
    plain, scattered = (draw_supernova(SCENARIO, 4, scatter=flag) for flag in (False, True))
    assert (plain.mu, plain.z, plain.t_max) == (scattered.mu, scattered.z, scattered.t_max)
    assert plain.mag("V", 60741.0, 4) != scattered.mag("V", 60741.0, 4)


def test_scatter_has_the_covariance_of_the_model() -> None:
    model, rng = type_ia_model(), np.random.default_rng(8)
    phases = np.array([-5.0, 2.0])
    drawn = np.array([
        np.concatenate([one["B"], one["I"]])
        for one in (draw_scatter(model, ("B", "I"), phases, rng) for _ in range(20000))
    ])  # fmt: skip
    s_b, s_i = (np.interp(phases, model.phases, model.template_scatter[band]) for band in "BI")
    grey, near = model.scatter.grey**2, np.exp(-1.0)
    expected = np.empty((4, 4))
    within = np.array([[1.0, near], [near, 1.0]])
    expected[:2, :2] = grey + model.scatter.colour["B"] ** 2 + np.outer(s_b, s_b) * within
    expected[2:, 2:] = grey + model.scatter.colour["I"] ** 2 + np.outer(s_i, s_i) * within
    expected[:2, 2:] = grey + 0.3 * np.outer(s_b, s_i) * within
    expected[2:, :2] = expected[:2, 2:].T
    # A variance from 20 000 draws is known to 1 %.
    assert np.cov(drawn.T) == pytest.approx(expected, rel=0.05)
