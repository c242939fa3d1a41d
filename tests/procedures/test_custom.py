"""The user's own procedure: time limits, failures, process borders, and an example with a mixed model."""

import functools
import pickle
import subprocess
import sys
import time
import warnings

import numpy as np
import pytest
import statsmodels.api as sm

from withstand.departures import Clusters, World
from withstand.engine.block import BASELINE, Kernel
from withstand.engine.executors import open_executor, parcel
from withstand.engine.job import Job
from withstand.errors import InputError, ScenarioError
from withstand.measures.compute import measure
from withstand.procedures import Custom, Ols
from withstand.procedures.custom import fingerprint
from withstand.study.design import Design
from withstand.study.focus import Focus
from withstand.study.rows import FixedRows
from withstand.study.study import Study

from .odd_data import make, mean_at, new_at, sample_of, slope, two_slopes

LEVEL = 0.95


def least_squares(y, X):
    result = sm.OLS(y, X).fit()
    return result.params[1], *result.conf_int()[1], result.pvalues[1]


def study_of(design, effect=0.5):
    focus = (Focus.coefficient("x1", design.names, effect),)
    return Study("custom", "", design, focus, np.array([1.0, 0.3, -0.2]), 1.5, FixedRows(design), digest="custom")


class SmallJob(Job):
    """A job with narrow blocks, since every replicate is fitted on its own."""

    width = 40


def tallies(procedures, design, **options):
    job = SmallJob(study_of(design, **options), (), tuple(procedures), 5)
    found = Kernel(job).run(range(1), {BASELINE: range(len(procedures))})
    return [
        measure(found[BASELINE, i][0], ["coverage", "width", "size", "power", "bias", "failure_rate"], 1.5)
        for i in range(len(procedures))
    ]


def test_a_callable_that_is_least_squares_judges_like_it():
    """In all three worlds: coverage at the reference, size at the null, power at the effect."""
    design, _ = make("plain", 1)
    own, built_in = tallies([Custom("mine", least_squares), Ols()], design)
    for name in own:
        assert own[name].value == pytest.approx(built_in[name].value, rel=1e-9, abs=1e-12)
    assert 0.0 < own["power"].value < 1.0
    assert own["failure_rate"].value == 0.0


def mixed_model(y, X, design):
    """Random intercepts by group, by restricted maximum likelihood; large-sample interval and test."""
    with warnings.catch_warnings():
        warnings.simplefilter("ignore")
        result = sm.MixedLM(y, X, groups=design.groups).fit(reml=True, method="powell")
    return result.params[1], *result.conf_int()[1], result.pvalues[1]


def test_a_mixed_model():
    """Random intercepts keep the interval of a group-level slope; that of least squares is too short.

    Groups of 5 with intraclass correlation 0.8 have design effect 4.2, at which a 95 % interval covers about
    2 Phi(1.96 / sqrt(4.2)) - 1 = 0.66.
    """
    groups = np.repeat(np.arange(12), 5)
    x = np.repeat(np.random.default_rng(2).standard_normal(12), 5)
    design = Design(np.column_stack([np.ones(60), x, np.arange(60) % 2]), ("Intercept", "x1", "x2"), groups=groups)
    procedures = (Custom("mixed", mixed_model, with_design=True), Ols())
    job = SmallJob(study_of(design, effect=None), (World(((Clusters(), 0.8),)),), procedures, 5)
    found = Kernel(job).run(range(2), {0: range(2)})
    mixed, plain = (measure(found[0, i][0], ["coverage", "failure_rate"]) for i in range(2))
    assert mixed["failure_rate"].value < 0.05
    # The exact 95 % intervals of the two coverages lie apart.
    assert mixed["coverage"].low > plain["coverage"].high


def raises_on_some(y, X):
    if y[0] > 1.0:
        raise RuntimeError("no luck")
    return least_squares(y, X)


def sloppy(y, X):
    match int(abs(y[0]) * 1000) % 6:
        case 0:
            return np.nan, 0.0, 1.0, 0.5
        case 1:
            return 0.0, 1.0, -1.0, 0.5
        case 2:
            return 0.0, -1.0, 1.0, 1.5
        case 3:
            return 0.0, -1.0, np.inf, 0.5
        case 4:
            return 0.0, -1.0, 1.0
    return least_squares(y, X)


def exits(y, X):
    raise SystemExit(3)


def fit_once(fit, design, errors, **options):
    zero = np.zeros(design.p)
    return Custom("mine", fit, **options).prepare(design, [slope(design)], LEVEL)(sample_of(design, errors, coefficients=zero))[
        0
    ]


def test_exceptions_are_failures_of_their_replicate():
    design, errors = make("plain", 1)
    fit = fit_once(raises_on_some, design, errors)
    np.testing.assert_array_equal(np.zeros(8, bool) if fit.failed is None else fit.failed, errors[0] > 1.0)
    assert (errors[0] > 1.0).any()
    assert fit_once(exits, design, errors).failed.all()


def test_answers_that_make_no_sense_are_failures():
    design, errors = make("plain", 1)
    errors = np.repeat(errors, 3, axis=1)
    errors[0] = np.arange(24) / 1000.0 + 1e-6
    fit = fit_once(sloppy, design, errors)
    np.testing.assert_array_equal(fit.failed, np.arange(24) % 6 != 5)


def stuck(y, X):
    while y[0] > 0.0:
        pass
    return least_squares(y, X)


def asleep(y, X):
    if y[0] > 0.0:
        time.sleep(30.0)
    return least_squares(y, X)


@pytest.mark.parametrize("slow", [stuck, asleep])
def test_calls_that_take_too_long_are_failures(slow):
    """Both a loop that never ends and a call that waits outside the interpreter; the others are answered."""
    design, errors = make("plain", 1)
    errors[0] = [-1.0, 1.0, -1.0, -1.0, 1.0, -1.0, -1.0, -1.0]
    began = time.monotonic()
    fit = fit_once(slow, design, errors, seconds=0.5)
    assert time.monotonic() - began < 15.0
    np.testing.assert_array_equal(fit.failed, errors[0] > 0.0)


def vandal(y, X):
    answer = least_squares(y, X)
    y[:] = 0.0
    X[:] = 0.0
    return answer


def test_a_callable_that_writes_to_its_arrays_harms_nothing():
    design, errors = make("plain", 1)
    X = design.X.copy()
    np.testing.assert_array_equal(fit_once(vandal, design, errors).low, fit_once(least_squares, design, errors).low)
    np.testing.assert_array_equal(design.X, X)


def without_p(y, X):
    estimate, low, high, _ = least_squares(y, X)
    return estimate, low, high, None


def test_without_a_p_value_the_interval_decides():
    design, errors = make("plain", 1)
    errors = errors + np.linspace(0.0, 2.0, 8) * design.X[:, 1:2]
    fit = fit_once(without_p, design, errors)
    expected = fit_once(least_squares, design, errors).rejects(np.zeros(1))
    np.testing.assert_array_equal(fit.rejects(np.zeros(1)), expected)
    assert 0 < expected.sum() < 8


def test_it_runs_in_worker_processes(tmp_path):
    """A callable of a module crosses; the numbers are those of this process."""
    (tmp_path / "own_procedures.py").write_text(
        "import numpy as np\n"
        "def middle(y, X):\n"
        "    b = np.linalg.lstsq(X, y, rcond=None)[0][1]\n"
        "    return b, b - 1.0, b + 1.0, 0.04 if abs(b) > 0.5 else 0.5\n",
        encoding="utf-8",
    )
    script = (
        "import numpy as np, own_procedures\n"
        "from withstand.engine.executors import open_executor, parcel, run_task\n"
        "from withstand.engine.block import BASELINE\n"
        "from withstand.engine.job import Job\n"
        "from withstand.procedures import Custom\n"
        "from withstand.study.design import Design\n"
        "from withstand.study.focus import Focus\n"
        "from withstand.study.rows import FixedRows\n"
        "from withstand.study.study import Study\n"
        "def main():\n"
        "    X = np.column_stack([np.ones(12), np.arange(12.0)])\n"
        "    design = Design(X, ('Intercept', 'x1'))\n"
        "    focus = (Focus.coefficient('x1', design.names, 0.2),)\n"
        "    study = Study('s', '', design, focus, np.zeros(2), 1.0, FixedRows(design))\n"
        "    job = Job(study, (), (Custom('middle', own_procedures.middle),), 3)\n"
        "    packed = [run_task(job, 'here', 0, {BASELINE: [0]})[BASELINE, 0][0].pack()]\n"
        "    with open_executor(2) as executor:\n"
        "        there = executor.submit(run_task, parcel(job, executor), 'there', 0, {BASELINE: [0]}).result()\n"
        "    packed.append(there[BASELINE, 0][0].pack())\n"
        "    assert packed[0][0] == 2000.0\n"
        "    assert np.array_equal(*packed)\n"
        "    print('same')\n"
        "if __name__ == '__main__':\n"
        "    main()\n"
    )
    (tmp_path / "main.py").write_text(script, encoding="utf-8")
    path = {"PYTHONPATH": ":".join([str(tmp_path), *sys.path]), "OPENBLAS_NUM_THREADS": "1"}
    done = subprocess.run(
        [sys.executable, "main.py"], cwd=tmp_path, env=path, capture_output=True, text=True, timeout=120, check=False
    )
    assert done.stdout.strip() == "same", done.stderr


def test_a_function_that_cannot_cross_is_refused_in_words():
    def local(y, X):
        return least_squares(y, X)

    design, _ = make("plain", 1)
    job = Job(study_of(design), (), (Custom("local", local),), 5)
    with pytest.raises(InputError, match="cannot be sent to worker processes"), open_executor(2) as executor:
        parcel(job, executor)
    with open_executor(1) as executor:
        assert parcel(job, executor) is job


def test_it_survives_pickling():
    custom = Custom("mine", least_squares, focus="x1", seconds=2.0)
    assert pickle.loads(pickle.dumps(custom)) == custom


def made(constant, default=1):
    def inner(y, X, weight=default):
        return constant * weight, -1.0, 1.0, 0.5

    return inner


class Callable:
    def __init__(self, shrink):
        self.shrink = shrink

    def __call__(self, y, X):
        return self.shrink, -1.0, 1.0, 0.5


def test_stored_results_are_filed_under_code_and_what_it_carries():
    assert fingerprint(made(1.0)) == fingerprint(made(1.0))
    different = [made(1.0), made(2.0), made(1.0, 2), least_squares, Callable(0.5), Callable(0.6)]
    different += [functools.partial(mixed_model, design=value) for value in (1, 2)]
    assert len({fingerprint(function) for function in different}) == len(different)
    one, other = Custom("mine", made(1.0)), Custom("mine", made(2.0))
    assert one.identity == other.identity == "mine"
    assert one.key != other.key
    assert Ols().key == Ols().identity
    with pytest.raises(InputError, match="carries an object of type 'generator'"):
        fingerprint(functools.partial(least_squares, X=(i for i in range(3))))


def test_it_says_what_it_does_not_answer():
    design, errors = make("plain", 1)
    custom = Custom("mine", least_squares, focus="x1")
    assert "answers for 'x1'" in custom.not_applicable(design, mean_at(design))
    assert custom.not_applicable(design, slope(design)) is None
    assert "single estimate" in Custom("mine", least_squares).not_applicable(design, two_slopes(design))
    with pytest.raises(ScenarioError, match=r"'mine' gives one answer, and the study asks for 'x1', 'mean'"):
        Custom("mine", least_squares).prepare(design, [slope(design), mean_at(design)], LEVEL)
    sample = sample_of(design, errors, coefficients=np.zeros(3))
    assert Custom("mine", without_p).prepare(design, [new_at(design)], LEVEL)(sample)[0].failed is None


@pytest.mark.parametrize(
    ("arguments", "told"),
    [
        (("", least_squares), "the name of a custom procedure is ''"),
        (("mine", 3), "fit of 'mine' is 3, which cannot be called"),
        (("mine", least_squares, None, 0.0), "seconds of 'mine' is 0.0"),
    ],
)
def test_what_cannot_be_a_procedure_is_refused(arguments, told):
    with pytest.raises(ScenarioError, match=told):
        Custom(*arguments)
