"""A numerical term that cannot be had makes what hangs on it unknown, with the reason; it is never zero."""

import math
from dataclasses import replace

import numpy as np
import pytest

from wakeledger.confidence.samples import Samples
from wakeledger.confidence.terms import add_terms
from wakeledger.run.chain.outputs import OUTPUTS, estimate_of
from wakeledger.run.gridded import regrid_of
from wakeledger.run.load import load
from wakeledger.run.prepared import prepare
from wakeledger.run.uncertainty.numerics import LOSS_ZERO, METHOD, OFFSET_ZERO, numerical_terms

VORTEX_SUM = estimate_of("induced_drag", "vortex_sum")


@pytest.fixture
def found(kit, tmp_path):
    data = kit.table(kit.wing(), *kit.axes(spacing=0.0375, y=(-0.9, 0.9), z=(-0.6, 0.5)))
    given = load(kit.write(tmp_path, data, kit.description()))
    prepared = prepare(given)
    regrid = regrid_of(given, prepared.chain.state(prepared.nominal.reference))

    def terms(method=None, **outer):
        made = numerical_terms(
            prepared.chain,
            prepared.nominal,
            outer=replace(prepared.outer, **outer),
            regrid=regrid,
            method_uncertainty={} if method is None else {VORTEX_SUM: method},
        )
        return {term.name: term for term in made}

    return terms


def unknown(term):
    return {name for name, u in zip(OUTPUTS, term.standard_uncertainty, strict=True) if math.isnan(u)}


def test_an_unknown_doubt_of_the_zero(found):
    term = found(loss_zero_uncertainty=math.nan)[LOSS_ZERO]
    assert {"profile_drag", "total_drag", "profile_drag coefficient"} <= unknown(term)
    # An output without a value is in no doubt.
    assert "wake_blockage" not in unknown(term) and "wake_blockage" in OUTPUTS
    draws = Samples(OUTPUTS, np.tile(np.arange(2.0)[:, None], (1, len(OUTPUTS))))
    why = add_terms(draws, [term], seed=1).unknown
    assert why[OUTPUTS.index("profile_drag")] == f"the term '{LOSS_ZERO}' is unknown"


def test_an_unknown_doubt_of_the_angles(found):
    term = found(offset_uncertainty=math.nan)[OFFSET_ZERO]
    assert estimate_of("induced_drag", "energy_area") in unknown(term)
    assert not {"induced_drag", "profile_drag", "lift"} & unknown(term)


def test_a_zero_that_was_not_taken_out_has_no_doubt(found):
    terms = found(share=0.05, loss_zero_uncertainty=math.nan, offset_uncertainty=math.nan)
    assert LOSS_ZERO not in terms and OFFSET_ZERO not in terms


def test_an_unknown_doubt_of_a_method(found):
    assert unknown(found(method=math.nan)[METHOD.format(VORTEX_SUM)]) == {VORTEX_SUM}
    assert not unknown(found(method=0.1)[METHOD.format(VORTEX_SUM)])
