"""What errors and numerical choices make of a prepared survey: terms, draws and budget."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass, replace

import numpy as np

from wakeledger.confidence.budget import Budget, make_budget, with_scaled_scatter
from wakeledger.confidence.curvature import curvature_factor, scaled_budget, scaled_samples
from wakeledger.confidence.linear_budget import NEGLIGIBLE, LinearBudget
from wakeledger.confidence.montecarlo import run as run_montecarlo
from wakeledger.confidence.samples import Samples
from wakeledger.confidence.sampling import ErrorSampler
from wakeledger.confidence.terms import NumericalTerm, add_terms
from wakeledger.core.grid import Array
from wakeledger.physics.methods.entropy_area import expansion_doubt
from wakeledger.physics.methods.wake_line import evaluate as evaluate_wake_line
from wakeledger.physics.methods.wake_line import path_scatter
from wakeledger.run.chain.estimates import counted_mask, without_walls
from wakeledger.run.chain.outputs import OUTPUTS, ROWS, coefficient_of, corrected_coefficient_of, estimate_of
from wakeledger.run.computed import mesh_term
from wakeledger.run.gridded import core_spacings, regrid_of
from wakeledger.run.load import SurveyInput
from wakeledger.run.prepared import Prepared
from wakeledger.run.uncertainty.linear import linear_slopes, paired, separated, survey_budget, tried, with_prediction
from wakeledger.run.uncertainty.numerics import numerical_terms
from wakeledger.run.uncertainty.spacing import Cores
from wakeledger.run.uncertainty.wandering import wandering_term

#: Draws that tell the wake region's own effect from that of noise.
_NOISE_DRAWS = 16
#: What sums of cells and sums of differences may differ by on the same vorticity, as a share.
DISCRETISATION = 1e-4
#: Which outputs are rows or their coefficients.
_OF_ROWS = np.isin(OUTPUTS, [name(row) for row in ROWS for name in (str, coefficient_of, corrected_coefficient_of)])


Progress = Callable[[int, int], None]
#: What the choice among methods is worth, given draws of the outputs that hold everything else.
Choice = Callable[[Samples], Sequence[NumericalTerm]]


def terms_of(prepared: Prepared, survey: SurveyInput) -> tuple[NumericalTerm, ...]:
    """Numerical terms of a prepared survey.

    Parameters
    ----------
    prepared : Prepared
        The survey.
    survey : SurveyInput
        As it was loaded.

    Returns
    -------
    tuple of NumericalTerm
    """
    own = mesh_term(survey, prepared.chain, prepared.nominal) if survey.computed else None
    vortices = prepared.vortices.vortices
    about = [(one, one) for one in core_spacings(prepared.chain, vortices)]
    if prepared.chain.gridding.operators() is None:
        # Between scattered points it is the interpolation that errs, not the differences on its fine grid.
        vortices, about = (), []
    found = numerical_terms(
        prepared.chain,
        prepared.nominal,
        outer=prepared.outer,
        regrid=regrid_of(survey, prepared.chain.state(prepared.nominal.reference)),
        method_uncertainty=_method_uncertainty(prepared),
        noise=_noise_draws(prepared, seed=survey.survey.uncertainty.seed),
        cores=Cores(vortices, about or [prepared.chain.gridding.raw_spacing] * len(vortices)),
    )
    smeared = wandering_term(survey.survey.wake, prepared.vortices, prepared.chain, prepared.nominal)
    return (*found, *(one for one in (smeared, own) if one is not None))


def with_notes(prepared: Prepared, terms: Sequence[NumericalTerm]) -> Prepared:
    """The survey with what its numerical terms have to say among its notes."""
    return replace(prepared, notes=(*prepared.notes, *(term.note for term in terms if term.note)))


def _method_uncertainty(prepared: Prepared) -> dict[str, float]:
    """Standard uncertainty that each estimate's own choices add, N."""
    chain, nominal, near = prepared.chain, prepared.nominal, prepared.chain.frozen.near_field
    flow, reference = nominal.flow, nominal.reference
    found = {
        estimate_of("induced_drag", "vortex_sum"): prepared.vortices.method_uncertainty,
        estimate_of("profile_drag", "entropy_area"): expansion_doubt(flow, reference, nominal.profile_integrand),
        estimate_of("lift", "wake_line"): DISCRETISATION * abs(nominal.values["lift"]),
    }
    if chain.frozen.cuts is not None and near is not None:
        # The bound vortex makes families of paths differ as predicted; what is left over is the method's doubt.
        v, w = without_walls(chain.settings, flow, nominal.forces)
        far = evaluate_wake_line(
            chain.frozen.cuts,
            v - near[0],
            w - near[1],
            reference.density,
            reference.speed,
            mask=counted_mask(chain.settings, nominal.region.mask, flow.grid),
        )
        found[estimate_of("induced_drag", "wake_line")] = float(path_scatter(far.family_drag))
    return found


def _noise_draws(prepared: Prepared, *, seed: int) -> list[dict[str, Array]]:
    """A few draws of the errors that differ from point to point."""
    random = [source for source in prepared.sources if source.effect != "systematic"]
    if not random:
        return []
    inputs = {name: prepared.layouts[name] for source in random for name in source.applies_to}
    draws = ErrorSampler(random, inputs, seed=seed).draw(0, _NOISE_DRAWS)
    return [{name: array[k] for name, array in draws.items()} for k in range(_NOISE_DRAWS)]


@dataclass(frozen=True)
class Propagated:
    """Uncertainty of the outputs: draws with numerical terms, and without; what derivatives make of the same errors.

    `held` are those that the cross-checks are made with: all terms but the choice among methods. `factor` is what the
    deviations of the rows were multiplied by, before the terms were added, so that their curvature counts once; those
    of `held` and `plain` are as drawn.
    """

    samples: Samples
    held: Samples
    budget: Budget
    plain: Samples
    predicted: Samples
    linear: LinearBudget
    factor: Array


def propagate(
    prepared: Prepared,
    terms: Sequence[NumericalTerm],
    *,
    draws: int,
    seed: int,
    progress: Progress | None,
    choice: Choice = lambda _: (),
) -> Propagated:
    """Monte Carlo draws of a prepared survey, its budget, and what derivatives make of the same errors.

    Parameters
    ----------
    prepared : Prepared
        The survey, with sources.
    terms : sequence of NumericalTerm
        From `terms_of`.
    draws, seed : int
        Of the Monte Carlo.
    progress : callable or None
        Called with the draws done and their number.
    choice : callable
        Gives the terms of the choice among methods.

    Returns
    -------
    Propagated
    """
    chain, nominal, given, inputs = prepared.chain, prepared.nominal, prepared.sources, prepared.layouts
    slopes = tried(chain, linear_slopes(chain, nominal, given, inputs), given, inputs)
    drawn = run_montecarlo(
        with_prediction(chain.vectors, slopes),
        given,
        inputs,
        names=(*OUTPUTS, *(f"{name} by derivatives" for name in OUTPUTS)),
        draws=draws,
        seed=seed,
        progress=progress,
    )
    plain, predicted = separated(drawn)
    held = add_terms(plain, terms, seed=seed)
    terms = (*terms, *choice(held))
    budget = make_budget(
        chain.vectors,
        given,
        inputs,
        plain,
        seed=seed,
        terms=terms,
        slopes=slopes,
        draws=max(50, draws // 5),
    )
    whole = sum(sum(noise.variance) for noise in prepared.noises)
    noisy = {noise.name for noise in prepared.noises if sum(noise.variance) >= NEGLIGIBLE * whole}
    variance = plain.standard_uncertainty**2
    pairs = paired(chain.vectors, given, inputs, budget.components, variance)
    linear = survey_budget(
        chain, nominal, slopes, given, inputs, noisy=noisy, components=budget.components, pairs=pairs
    )
    factor = np.where(_OF_ROWS, curvature_factor(variance, linear.second_order**2, linear.inflation), 1.0)
    samples = add_terms(scaled_samples(plain, factor), terms, seed=seed)
    budget = with_scaled_scatter(scaled_budget(budget, factor, samples.standard_uncertainty), factor)
    return Propagated(samples, held, budget, plain, predicted, linear, factor)


def numerical_only(
    prepared: Prepared, terms: Sequence[NumericalTerm], *, draws: int, seed: int, choice: Choice = lambda _: ()
) -> tuple[Samples, Samples, Budget]:
    """Nothing was measured in a computed flow: numerical terms are all the uncertainty there is.

    Gives the draws, those without the choice among methods, and the budget.
    """
    plain = Samples(OUTPUTS, np.tile(prepared.nominal.vector, (draws, 1)))
    held = add_terms(plain, terms, seed=seed)
    terms = (*terms, *choice(held))
    budget = make_budget(prepared.chain.vectors, (), {}, plain, seed=seed, terms=terms)
    return add_terms(plain, terms, seed=seed), held, budget
