"""Outcomes with invented numbers, for tests of rendering alone."""

import math

import pandas as pd
import pytest

from withstand.lab.outcome import MEASURE_COLUMNS, RANKING_COLUMNS, TIPPING_COLUMNS, VERDICT_COLUMNS, Outcome

PROCEDURES = ("ols", "hc3", "hc2-bm", "cr2", "huber")
# departure, along, stack, ladder, label, harm a unit of severity, procedures that resist it, exact, plausible range
DEPARTURES = (
    ("clusters", "", "", (0.05, 0.1, 0.2, 0.4), "icc {}", 0.45, {"cr2"}, True, (0.0, 0.46)),
    ("fan", "dry_hours", "", (1.5, 2.0, 3.0, 5.0), "SD ratio {}", 0.012, {"hc3", "hc2-bm"}, True, (0.6, 2.1)),
    ("fan", "fitted", "skew skewness 1", (2.0, 4.0), "SD ratio {}", 0.011, {"hc3", "hc2-bm"}, False, (math.nan, math.nan)),
    ("serial", "", "", (0.1, 0.2, 0.4, 0.6), "rho {}", 0.2, set(), True, (-0.2, 0.25)),
    ("heavy-tails", "", "", (1 / 30, 0.1, 0.2, 1 / 3), "t with {} df", -0.02, set(), False, (0.0, 0.2)),
    ("skew", "", "", (0.5, 1.0, 2.0, 4.0), "skewness {}", 0.0015, set(), False, (0.3, 1.9)),
    ("outliers", "", "", (3.0, 5.0, 8.0, 12.0), "1 row by {} SD", 0.004, {"huber"}, False, (2.0, 3.5)),
)
WIDTH = {"ols": 1.0, "hc3": 1.09, "hc2-bm": 1.06, "cr2": 1.21, "huber": 1.03}
START = {"ols": 0.95, "hc3": 0.957, "hc2-bm": 0.951, "cr2": 0.953, "huber": 0.944}


def _figure(kind, severity):
    return f"{1 / severity:g}" if kind == "heavy-tails" else f"{severity:g}"


def _shown(kind, along, stack):
    by = {"clusters": " by charge", "serial": " along run_no"}.get(kind, f" along {along}" if along else "")
    return f"{kind}{by}{f' with {stack}' if stack else ''}"


def _rows(n, where, procedure, focus, coverage, base, exact, repetitions, failures, effect):
    def row(measure, value, se, low, high, shift):
        return {
            "n": n, **where, "procedure": procedure, "focus": focus, "measure": measure, "value": value, "mc_se": se,
            "low": low, "high": high, "shift": shift, "shift_se": 0.5 * se, "method": "exact" if exact else "simulated",
            "repetitions": 0 if exact else repetitions, "failures": failures,
        }  # fmt: skip

    def share(measure, value, shift):
        se = 0.0 if exact else math.sqrt(value * (1 - value) / repetitions)
        return row(measure, value, se, max(0.0, value - 1.96 * se), min(1.0, value + 1.96 * se), shift)

    width = 0.1 * WIDTH.get(procedure, 1.15) * (2.0 if focus != "dry_hours" else 1.0)
    rows = [share("coverage", coverage, coverage - base), share("size", 1 - coverage, base - coverage)]
    rows.append(row("width", width, 0.0 if exact else 0.0003, width, width, 0.0))
    rows.append(row("bias_in_sd", 0.01, 0.0, 0.01, 0.01, math.nan))
    if effect:
        rows.append(share("power", 0.81 / WIDTH.get(procedure, 1.15), 0.0))
    if failures:
        rows.append(share("failure_rate", failures / repetitions, failures / repetitions))
    return rows


def _verdict(coverage, low=0.94, high=0.96):
    if abs(coverage - low) < 0.0015:
        return "unsettled"
    return "holds" if low < coverage < high + 0.01 else "gives"


def build(
    procedures=PROCEDURES,
    departures=DEPARTURES,
    foci=("dry_hours", "species[oak] - species[ash]"),
    planned=False,
    title="Does drying time warp the boards?",
    rename=None,
):
    """An outcome in which everything that can be shown is there; `rename` maps focus names."""
    n, repetitions = 36, 10_000
    names = rename or {}
    measures, verdicts, tipping, ranking = [], [], [], []
    for f, focus in enumerate(foci):
        shown = names.get(focus, focus)
        worst = []
        for procedure in procedures:
            base = START.get(procedure, 0.948)
            where = {"departure": "none", "along": "", "severity": 0.0, "severity_label": "nothing wrong", "stack": ""}
            exact = procedure != "huber"
            measures += _rows(n, where, procedure, shown, base, base, exact, repetitions, 0, f == 0)
        for kind, along, stack, ladder, label, harm, resist, exact, plausible in departures:
            neutral = 1.0 if "fan" in kind else 0.0
            for procedure in procedures:
                base = START.get(procedure, 0.948)
                at = []
                for severity in ladder:
                    damage = harm * (severity - neutral) * (0.12 if procedure in resist else 1.0) * (1.0 if f == 0 else 0.6)
                    coverage = min(0.9996, base - damage)
                    is_exact = exact and procedure != "huber"
                    where = {
                        "departure": kind, "along": along, "severity": severity,
                        "severity_label": label.format(_figure(kind, severity)), "stack": stack,
                    }  # fmt: skip
                    failures = 37 if procedure == "huber" and kind == "outliers" else 0
                    measures += _rows(n, where, procedure, shown, coverage, base, is_exact, repetitions, failures, f == 0)
                    se = 0.0 if is_exact else 0.002
                    verdict = _verdict(coverage)
                    verdicts.append(
                        {
                            "n": n, "departure": kind, "along": along, "severity": severity, "stack": stack,
                            "procedure": procedure, "focus": shown, "verdict": verdict, "deciding_measure": "coverage",
                            "value": coverage, "low": coverage - 2 * se, "high": coverage + 2 * se,
                            "method": "exact" if is_exact else "simulated", "repetitions": 0 if is_exact else repetitions,
                        }
                    )  # fmt: skip
                    at.append((severity, coverage, verdict))
                gives = [severity for severity, _, verdict in at if verdict == "gives"]
                holds = [severity for severity, _, verdict in at if verdict == "holds"]
                low, high = (math.nan, math.nan) if planned else plausible
                first = gives[0] if gives else math.nan
                last = max([s for s in holds if not gives or s < first], default=math.nan)
                point = first if exact else (first + last) / 2
                tipping.append(
                    {
                        "departure": kind, "along": along, "stack": stack, "procedure": procedure, "focus": shown,
                        "tipping": point, "last_holds": first if exact else last, "first_gives": first, "plausible_low": low,
                        "plausible_high": high, "observed": math.nan if planned else 0.7,
                        "detectability_at_tipping": min(0.97, 0.1 + 0.2 * len(worst)) if gives else math.nan,
                    }
                )  # fmt: skip
                severity, coverage, verdict = (
                    at[-1] if math.isnan(high) else max((one for one in at if one[0] <= high), default=at[0])
                )
                holding = next((name for name in procedures if name in resist), "")
                worst.append(
                    {
                        "departure": kind, "along": along, "stack": stack, "procedure": procedure, "focus": shown,
                        "worst_severity": severity, "worst_label": label.format(_figure(kind, severity)),
                        "coverage_there": coverage, "shift_there": coverage - base,
                        "method": "exact" if exact else "simulated", "verdict_there": verdict,
                        "cure": "no cure" if kind in ("clusters", "serial", "fan") else "fades with rows",
                        "limit": 0.62 if kind == "clusters" else math.nan, "holding_procedure": holding,
                        "premium": WIDTH.get(holding, math.nan) - 1.0,
                    }
                )  # fmt: skip
        ranking += sorted(worst, key=lambda row: row["shift_there"])
    tolerance = {
        "size": "cochran", "low": 0.04, "high": 0.06, "source": "Cochran (1954)", "coverage_low": 0.94, "coverage_high": 0.96,
        "bias": 0.4,
    }  # fmt: skip
    facts = {"name": "kiln_boards.csv", "formula": "cup_mm ~ dry_hours + thickness_mm + C(species)", "n": n, "level": 0.95}
    provenance = {"seed": 7, "versions": {"withstand": "0.1.0", "numpy": "2.1"}, "tolerance": tolerance}
    if not planned:
        facts |= {
            "p": 5, "df": 31, "rows_read": 39, "dropped": {"thickness_mm": 2, "charge": 1}, "leverage_max": 0.44,
            "leverage_rows": [3, 17], "order": "run_no", "groups": "charge", "weights": "", "error_sd": 1.234567,
            "r_squared": 0.612, "skewness": 0.71, "kurtosis": 3.4, "vif": {"dry_hours": 1.31, "thickness_mm": math.nan},
            "coefficients": [
                {"name": "Intercept", "estimate": 2.5, "se": 0.4}, {"name": "dry_hours", "estimate": 0.043, "se": 0.01},
            ],
            "rows_mode": "fixed",
            "axes": [
                {"departure": kind, "along": along, "stack": stack, "name": _shown(kind, along, stack),
                 "ladder": [[severity, label.format(_figure(kind, severity))] for severity in ladder]}
                for kind, along, stack, ladder, label, *_ in departures
            ],
            "focus": [
                {
                    "name": names.get(focus, focus), "kind": "coefficient", "estimate": 0.043, "low": 0.022, "high": 0.064,
                    "effect": None if i else 0.05,
                }
                for i, focus in enumerate(foci)
            ],
        }  # fmt: skip
        provenance |= {
            "study_digest": "9f2c" * 16, "plan_digest": "17ab" * 16, "repetitions": 10_000, "most": 160_000,
            "wrong_verdict": 0.01, "started": "2031-05-04T10:20:30+00:00", "seconds": 12.34, "workers": 2, "exact_cells": 120,
            "simulated_cells": 96, "targets": ["Under curvature the target is the coefficient of the linear part."],
        }  # fmt: skip
    return Outcome(
        title=title,
        measures=pd.DataFrame(measures, columns=list(MEASURE_COLUMNS)),
        verdicts=pd.DataFrame(verdicts, columns=list(VERDICT_COLUMNS)),
        tipping=pd.DataFrame(tipping, columns=list(TIPPING_COLUMNS)),
        ranking=pd.DataFrame(ranking, columns=list(RANKING_COLUMNS)),
        headline=(
            "Worry first about clusters: with these 36 rows the 95 % interval for dry_hours covers 77.0 % at icc 0.4.",
            "cr2 holds there; its intervals are 21 % wider when nothing is wrong.",
        ),
        facts=facts,
        notices=("2 rows share run_no 14; the table's own order was kept.", "species was read as labels."),
        refusals=(("prais-winsten", names.get(foci[0], foci[0]), "not applicable, because run_no has ties"),),
        provenance=provenance,
    )


HOSTILE = "<script>alert(\"1\")</script> & 'q' $x_1$ | `b` 木の板 " + "very long " * 12


@pytest.fixture(scope="session")
def rich():
    return build()


@pytest.fixture(scope="session")
def planned():
    return build(planned=True)


@pytest.fixture(scope="session")
def hostile():
    departures = (*DEPARTURES[:2], ("fan", HOSTILE, "", (2.0, 4.0), "SD ratio {}", 0.03, {"hc3"}, True, (1.0, 3.0)))
    return build(departures=departures, rename={"dry_hours": HOSTILE}, title=HOSTILE, procedures=("ols", HOSTILE, "hc3"))


@pytest.fixture(scope="session")
def crowded():
    many = tuple(
        (f"fan{i}" if i > 6 else kind, along, stack, ladder, label, harm * (1 + i / 20), resist, exact, plausible)
        for i, (kind, along, stack, ladder, label, harm, resist, exact, plausible) in enumerate((*DEPARTURES, *DEPARTURES))
    )
    return build(procedures=(*PROCEDURES, *(f"method-{i}" for i in range(10))), departures=many, foci=("dry_hours",))


@pytest.fixture(scope="session")
def bare():
    """One procedure, one departure, simulated, nothing known of the study."""
    one = build(procedures=("huber",), departures=DEPARTURES[5:6], foci=("dry_hours",), planned=True)
    return Outcome(one.title, one.measures, one.verdicts, one.tipping.iloc[:0], one.ranking.iloc[:0])
