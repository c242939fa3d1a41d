"""What every procedure promises, whatever it is. Procedures are read from the registry, so that a new one is tried at once."""

from dataclasses import fields, replace

import numpy as np
import pytest

from withstand.engine.noise import BlockNoise
from withstand.engine.tally import FEATURES, Questions, record
from withstand.errors import ScenarioError
from withstand.procedures import (
    REGISTRY,
    Bisquare,
    FittedWeights,
    FittedWeightsHc3,
    Gls,
    Hac,
    HacCosine,
    Huber,
    PraisWinsten,
    make_procedure,
)
from withstand.procedures.base import Answer
from withstand.procedures.sample import Sample
from withstand.study.design import Design, Factor
from withstand.study.focus import Focus, FocusKind, Point

OPTIONED = [
    Hac(lag=2),
    Hac(reference="fixed-b"),
    HacCosine(terms=4),
    FittedWeights(along="x1"),
    FittedWeightsHc3(along="fitted"),
    PraisWinsten(within="groups"),
    PraisWinsten(iterate=False),
    Gls(rho=-0.3),
    Gls(rho=0.8, within="groups"),
    Huber(k=2.0),
    Bisquare(c=6.0),
]
VARIANTS = [*(make_procedure(name) for name in REGISTRY), *OPTIONED]
LEVEL, N, B, SD = 0.9, 30, 6, 1.5
BETA = np.array([25.0, 1.2, -2.0])
NAMES = ("Intercept", "x1", "late")

each = pytest.mark.parametrize("procedure", VARIANTS, ids=lambda procedure: procedure.identity)


class Watched(BlockNoise):
    """Noise that tells whether a procedure drew from it."""

    drawn = False

    def procedure_generator(self, name):
        self.drawn = True
        return super().procedure_generator(name)


def make_design(n=N, groups=10):
    """Intercept, a skewed predictor and a dummy; order, groups, weights and a fitted mean."""
    rng = np.random.default_rng(21)
    x = rng.lognormal(0.0, 0.5, n)
    # Odd numbers of rows on either side of the dummy, as a median of an even number is not one value.
    late = np.isin(np.arange(n) % N, [1, *range(0, N, 3)]).astype(float)
    X = np.column_stack([np.ones(n), x, late])
    return Design(
        X,
        NAMES,
        columns={"x1": x},
        factors={"late": Factor(late.astype(np.int64), ("no", "yes"))},
        fitted=X @ BETA,
        order=np.arange(n, dtype=float),
        groups=(np.arange(n) * groups // n).astype(np.int64),
        weights=rng.uniform(0.5, 2.0, n),
    )


def make_foci():
    row = np.array([[1.0, 0.8, 0.0]])
    point = Point({"x1": 0.8}, {"late": "no"}, float(row[0] @ BETA))
    return [
        Focus.coefficient("x1", NAMES),
        Focus.coefficient("late", NAMES),
        Focus("both", FocusKind.JOINT, np.eye(3)[1:], np.zeros(2)),
        Focus("mean", FocusKind.MEAN, row, np.zeros(1), point=point),
        Focus("new", FocusKind.NEW, row, np.zeros(1), point=point),
    ]


def make_errors(n=N, width=B):
    return np.random.default_rng(8).standard_normal((n, width))


def sample_of(design, errors, *, coefficients=BETA, error_sd=SD):
    return Sample(design, errors, Watched(4, 0, errors.shape[1]), coefficients=coefficients, error_sd=error_sd)


def usable(procedure, design, foci):
    return [focus for focus in foci if procedure.not_applicable(design, focus) is None]


def solve(procedure, design, errors, foci=None, **more):
    """Fits by the name of the focus, and whether the procedure drew random numbers."""
    foci = usable(procedure, design, make_foci() if foci is None else foci)
    sample = sample_of(design, errors, **more)
    fits = procedure.prepare(design, foci, LEVEL)(sample) if foci else []
    return dict(zip([focus.name for focus in foci], fits, strict=True)), sample


def values_of(fit, truth):
    """All numbers and decisions of a fit at some hypothesised value, as arrays with replicates last."""
    width = fit.estimate.shape[1]
    missed = fit.misses(truth)
    decisions = [] if missed is None else list(missed)
    decisions.append(fit.rejects(truth))
    numbers = [fit.estimate, *(v[None] for v in (fit.variance, fit.width) if v is not None)]
    failed = np.zeros(width, dtype=bool) if fit.failed is None else fit.failed
    return np.concatenate(numbers), np.array(decisions), failed


def same(one, other, truth, other_truth=None, *, factor=1.0, shift=0.0, rel=1e-7, estimates_only=False):
    """Whether one fit is the other one scaled and shifted."""
    if estimates_only:
        assert factor * one.estimate + shift == pytest.approx(other.estimate, rel=rel, abs=rel)
        return
    numbers, decisions, failed = values_of(one, truth)
    expected, expected_decisions, expected_failed = values_of(other, truth if other_truth is None else other_truth)
    assert np.array_equal(failed, expected_failed)
    k = len(one.estimate)
    powers = [1] * k + [power for power, v in ((2, one.variance), (1, one.width)) if v is not None]
    numbers = numbers * factor ** np.array(powers)[:, None]
    numbers[:k] += shift
    sound = ~failed
    assert numbers[:, sound] == pytest.approx(
        expected[:, sound], rel=rel, abs=rel * np.abs(expected[:, sound]).max(initial=1.0)
    )
    assert np.array_equal(decisions[:, sound], expected_decisions[:, sound])


def truth_of(procedure, focus, size=0.4):
    """A value to test, off the estimate: in error SDs around 0, or in the unit of the response."""
    base = np.zeros(focus.k) if procedure.equivariant else focus.L @ BETA
    return base + (size if focus.kind in (FocusKind.MEAN, FocusKind.NEW) or procedure.equivariant else 0.0)


def by_name():
    return {focus.name: focus for focus in make_foci()}


@pytest.mark.parametrize("name", REGISTRY)
def test_a_procedure_describes_itself(name):
    cls = REGISTRY[name]
    assert cls.name == name
    for text in (cls.title, cls.formula, cls.source, cls.family, cls.null, cls.target, cls.__doc__):
        assert len(text) > 3
    assert make_procedure(name).identity == name or name == "pretest"  # a rule is called by what it says
    assert make_procedure(name) == cls()


def test_identities_tell_the_variants_apart():
    assert len({procedure.identity for procedure in VARIANTS}) == len(VARIANTS)


@pytest.mark.parametrize("name", REGISTRY)
def test_an_unknown_option_is_refused_by_name(name):
    with pytest.raises(ScenarioError, match=f"procedure '{name}' has no option 'colour'"):
        make_procedure(name, colour="red")


@each
def test_it_answers_for_a_design_that_has_everything(procedure):
    design, foci = make_design(), make_foci()
    assert procedure.not_applicable(design, foci[0]) is None
    for focus in foci:
        reason = procedure.not_applicable(design, focus)
        assert reason is None or reason.startswith("not applicable, because ")


@each
def test_it_gives_what_it_says_it_answers(procedure):
    fits, _ = solve(procedure, make_design(), make_errors())
    for name, fit in fits.items():
        focus = by_name()[name]
        given = procedure.answers(focus)
        assert given
        assert fit.estimate.shape == (focus.k, B)
        if focus.scalar and Answer.INTERVAL in given:
            assert fit.width.shape == (B,)
            below, above = fit.misses(truth_of(procedure, focus))
            assert below.shape == above.shape == (B,)
            assert not np.any(below & above)
        if focus.scalar and procedure.claims_variance:
            assert np.all(fit.variance > 0.0)
        if Answer.TEST in given:
            assert fit.rejects(truth_of(procedure, focus)).shape == (B,)


@each
def test_a_block_is_its_columns_one_by_one(procedure):
    """The plain path: each replicate fitted alone, with the same random numbers."""
    design, errors = make_design(), make_errors()
    together, _ = solve(procedure, design, errors)
    for b in range(B):
        alone, _ = solve(procedure, design, errors[:, [b]])
        for name, fit in alone.items():
            truth = truth_of(procedure, by_name()[name])
            numbers, decisions, failed = values_of(together[name], truth)
            lone = values_of(fit, truth)
            assert numbers[:, [b]] == pytest.approx(lone[0], rel=1e-8, abs=1e-8)
            assert np.array_equal(decisions[:, [b]], lone[1])
            assert failed[b] == lone[2][0]


@each
def test_it_is_the_same_at_every_call_and_leaves_its_input_alone(procedure):
    design, errors = make_design(), make_errors()
    kept = [array.copy() for array in (errors, design.X, design.Q, design.weights, design.order, design.fitted)]
    errors.setflags(write=False)
    foci = usable(procedure, design, make_foci())
    fitter = procedure.prepare(design, foci, LEVEL)
    sample = sample_of(design, errors)
    first, second = fitter(sample), fitter(sample)
    for focus, one, other in zip(foci, first, second, strict=True):
        same(one, other, truth_of(procedure, focus), rel=1e-12)
    for array, before in zip((errors, design.X, design.Q, design.weights, design.order, design.fitted), kept, strict=True):
        assert np.array_equal(array, before)
    residuals = errors - design.Q @ (design.Q.T @ errors)
    np.testing.assert_allclose(sample.residuals, residuals, atol=1e-12)
    np.testing.assert_allclose(sample.squared_residuals, residuals**2, atol=1e-12)


@each
def test_buffers_shared_with_others_do_not_change_it(procedure):
    """In a run, work arrays live on from block to block and from procedure to procedure."""
    design, errors = make_design(), make_errors()
    buffers = {}
    foci = usable(procedure, design, make_foci())
    others = [make_procedure(name).prepare(design, [foci[0]], LEVEL) for name in ("ols", "hc3", "hac", "fitted-weights-hc3")]
    fitter = procedure.prepare(design, foci, LEVEL)
    for block in (make_errors()[::-1].copy(), errors):
        sample = Sample(design, block, Watched(4, 0, B), coefficients=BETA, error_sd=SD, buffers=buffers)
        for other in others:
            other(sample)
        fits = fitter(sample)
    alone, _ = solve(procedure, design, errors)
    for focus, fit in zip(foci, fits, strict=True):
        same(fit, alone[focus.name], truth_of(procedure, focus), rel=1e-10)


@each
def test_the_order_of_the_rows_is_immaterial(procedure):
    """Unless the procedure needs an order; where it draws rows or signs at random, for its estimates."""
    design, errors = make_design(), make_errors()
    if procedure.not_applicable(replace(design, order=None), make_foci()[0]) is not None:
        assert procedure.family == "serial"
        return
    turn = np.random.default_rng(3).permutation(N)
    mixed = replace(design.rows(turn), order=design.order)
    plain, sample = solve(procedure, design, errors)
    turned, _ = solve(procedure, mixed, errors[turn])
    for name, fit in plain.items():
        same(fit, turned[name], truth_of(procedure, by_name()[name]), estimates_only=sample.noise.drawn)


@each
def test_the_scale_and_origin_of_a_predictor_are_immaterial(procedure):
    """x1 in another unit: 3 x1 + 7, with the focal rows and the coefficients in the new coordinates."""
    design, errors = make_design(), make_errors()
    S = np.array([[1.0, 7.0, 0.0], [0.0, 3.0, 0.0], [0.0, 0.0, 1.0]])
    other = replace(design, X=design.X @ S, columns={"x1": 3.0 * design.columns["x1"] + 7.0})
    foci = [
        replace(focus, L=focus.L @ S, point=focus.point and replace(focus.point, columns={"x1": 3.0 * 0.8 + 7.0}))
        for focus in make_foci()
    ]
    plain, _ = solve(procedure, design, errors)
    changed, _ = solve(procedure, other, errors, foci, coefficients=np.linalg.solve(S, BETA))
    for name, fit in plain.items():
        same(fit, changed[name], truth_of(procedure, by_name()[name]), rel=1e-6)


@each
def test_adding_a_fit_moves_the_estimates_alone(procedure):
    if not procedure.equivariant:
        return
    design, errors = make_design(), make_errors()
    plain, _ = solve(procedure, design, errors)
    moved, _ = solve(procedure, design, errors + (design.X @ BETA)[:, None])
    for name, fit in plain.items():
        focus = by_name()[name]
        truth = truth_of(procedure, focus)
        step = focus.L @ BETA
        same(fit, moved[name], truth, truth + step, shift=step[:, None], rel=1e-6)


@each
def test_scaling_the_response_scales_the_fit(procedure):
    if not procedure.equivariant:
        return
    design, errors = make_design(), make_errors()
    plain, _ = solve(procedure, design, errors)
    for factor in (1e-3, 40.0):
        scaled, _ = solve(procedure, design, factor * errors)
        for name, fit in plain.items():
            truth = truth_of(procedure, by_name()[name])
            same(fit, scaled[name], truth, factor * truth, factor=factor, rel=1e-6)


@each
def test_turning_the_response_around_turns_the_fit_around(procedure):
    if not procedure.equivariant:
        return
    design, errors = make_design(), make_errors()
    plain, sample = solve(procedure, design, errors)
    turned, _ = solve(procedure, design, -errors)
    for name, fit in plain.items():
        assert turned[name].estimate == pytest.approx(-fit.estimate, rel=1e-6, abs=1e-8)
        if not sample.noise.drawn and fit.width is not None:
            assert turned[name].width == pytest.approx(fit.width, rel=1e-6)


def awkward(errors):
    """Replicates that are hard to fit between two that are not."""
    hard = errors.copy()
    hard[:, 1] = 0.0
    hard[:, 2] = np.round(errors[:, 2])
    hard[4, 3] = 1e9
    hard[:, 4] = -1e4 + errors[:, 4]
    return hard


@each
def test_what_cannot_be_fitted_is_counted_and_disturbs_nobody(procedure):
    """No residuals at all, ties, an outlier of 1e9 SDs, responses far below zero: no error, no warning, and every number that
    is not flagged as a failure is finite. The sound replicates are what they are alone."""
    design, errors = make_design(), make_errors()
    fits, _ = solve(procedure, design, awkward(errors))
    plain, _ = solve(procedure, design, errors)
    for name, fit in fits.items():
        focus = by_name()[name]
        truth = truth_of(procedure, focus)
        out = np.empty((FEATURES, B))
        record(out, fit, Questions(truth, None if focus.kind is FocusKind.NEW else truth, None))
        assert np.isfinite(out).all()
        for b in (0, 5):
            numbers, decisions, failed = values_of(fit, truth)
            alone = values_of(plain[name], truth)
            assert not failed[b]
            assert numbers[:, b] == pytest.approx(alone[0][:, b], rel=1e-7, abs=1e-7)
            assert np.array_equal(decisions[:, b], alone[1][:, b])


@each
def test_two_rows_more_than_columns_are_no_error(procedure):
    small = make_design().rows(np.array([0, 4, 9, 17, 26]))
    errors = make_errors()[:5]
    foci = usable(procedure, small, make_foci())
    fits, _ = solve(procedure, small, errors, foci)
    for focus in foci:
        out = np.empty((FEATURES, B))
        truth = truth_of(procedure, focus)
        record(out, fits[focus.name], Questions(truth, None if focus.kind is FocusKind.NEW else truth, None))
        assert np.isfinite(out).all()


@each
def test_options_have_names_and_defaults(procedure):
    for field in fields(procedure):
        assert field.name == field.name.lower()
        assert getattr(type(procedure)(), field.name) == field.default
