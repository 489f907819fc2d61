"""Which candle a kind of target gets, and that naming one costs no heavy import."""

import subprocess
import sys

import pytest
from candle_light_curves import TRUTH, simulated, target

from reduce.candles import type_ia
from reduce.candles.assumptions import Assumptions
from reduce.candles.candle import TypeIa, candle_for


def test_a_type_ia_target_gets_the_type_ia_fit():
    curve = simulated(TRUTH)
    assert candle_for("type_ia").fit(curve, target()).mu == type_ia.fit(curve, target()).mu
    assert TypeIa(Assumptions(h0=70.0)).fit(curve, target()).mu > type_ia.fit(curve, target()).mu


def test_a_spectrum_of_another_type_takes_the_ground_from_under_mu():
    for word, doubted in (("Ia", False), ("SN Ia-norm", False), ("II", True), ("Ic", True)):
        found = type_ia.fit(simulated(TRUTH), target(spectroscopic_type=word))
        assert any(w.name == "other_type" and w.doubts_type for w in found.warnings) is doubted
        assert found.verdict.startswith("μ is in doubt" if doubted else "μ stands")


@pytest.mark.parametrize("kind", ["other"])
def test_other_kinds_say_that_there_is_no_relation_yet(kind):
    estimate = candle_for(kind).fit(simulated(TRUTH), target())
    assert (estimate.mu, estimate.kind) == (None, kind)
    assert estimate.verdict == "no distance relation for this kind yet"


def test_naming_a_candle_loads_no_scientific_library():
    code = "import sys, reduce.candles.candle; print({'scipy', 'astropy', 'pandas'} & set(sys.modules))"
    out = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, check=True)
    assert out.stdout.strip() == "set()"
