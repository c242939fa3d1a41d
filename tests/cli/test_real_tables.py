"""A full report from tables everyone knows, with nothing but a model and a focus.

The data ship with statsmodels. Estimates are compared with what statsmodels' own OLS gives on the same table: an independent
implementation.
"""

import json

import pytest
import statsmodels.api as sm

TABLES = {
    "stackloss": ("STACKLOSS ~ AIRFLOW + WATERTEMP + ACIDCONC", "AIRFLOW"),
    "longley": ("TOTEMP ~ GNPDEFL + GNP + UNEMP + ARMED + POP + YEAR", "GNP"),
    "engel": ("foodexp ~ income", "income"),
}


@pytest.mark.parametrize("name", TABLES)
def test_full_report(name, folder, call):
    model, focus = TABLES[name]
    frame = getattr(sm.datasets, name).load_pandas().data
    frame.to_csv(folder / f"{name}.csv", index=False)
    options = ["--model", model, "--focus", focus, "--repetitions", 2000, "--most", 2000, "--seed", 5, "--workers", 1]
    code, out, err = call("run", f"{name}.csv", *options)
    assert (code, err) == (0, "")
    assert out.startswith(f"{name}: {len(frame)} rows, none dropped.")
    place = folder / "outputs" / name
    page = (place / "report.html").read_text(encoding="utf-8")
    assert focus in page
    assert list((place / "figures").glob("coverage*.svg"))
    told = json.loads((place / "run.json").read_text(encoding="utf-8"))["facts"]
    fit = sm.OLS.from_formula(model, frame).fit()
    ours = {one["name"]: (one["estimate"], one["se"]) for one in told["coefficients"]}
    for term, estimate in fit.params.items():
        # 'longley' is the classic of ill conditioning: its design has condition number 5e9 (statsmodels' summary)
        assert ours[term] == pytest.approx((estimate, fit.bse[term]), rel=1e-6)
