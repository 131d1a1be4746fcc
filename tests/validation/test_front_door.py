"""What must not matter does not: row order, units, labels, other columns, the seed. And weights."""

import numpy as np
import pandas as pd
import pytest
import statsmodels.formula.api as smf

import clingstone
from clingstone.results import to_json
from tests.validation import worlds as w
from tests.validation.battery import PLACE

KINDS = {
    "group": (w.groups(12, 6, 0.2, "group", equal=False), {"model": "y ~ x", "group": "g"}),
    "time": (w.series(80, 0.5, "ar"), {"model": "y ~ x", "time": "t"}),
    "panel": (w.panel(12, 6, 0.3, 0.5, "ar"), {"model": "y ~ x", "group": "g", "time": "t"}),
    "place": (w.places(60, 30, 0.7, "smooth"), PLACE),
    "nested": (w.nested(6, 3, 3, 0.3, 0.2, "b"), {"model": "y ~ x", "group": "a/b"}),
}
NESTED = pytest.param("nested", marks=pytest.mark.slow)  # ten seconds each
_KNOWN: dict[str, tuple[pd.DataFrame, dict[str, object], clingstone.Examination]] = {}


def examine(frame, **arguments):
    """Without a rehearsal: its replicates are drawn row by row, and it takes most of the time."""
    return clingstone.examine(frame, **{"rehearsal": "none", **arguments})


def known(kind):
    if kind not in _KNOWN:
        draw, arguments = KINDS[kind]
        frame, _ = w.World(kind, draw, arguments).table(np.random.default_rng(3))
        _KNOWN[kind] = frame, arguments, examine(frame, **arguments)
    return _KNOWN[kind]


DRAWN = ("wild-cluster-bootstrap", "randomisation")  # remedies whose interval rests on random draws


# Findings whose size is on the scale of the response or of a coefficient.
IN_UNITS = ("group-endogeneity", "slope-variation", "group-influence")


def by_draws(finding):
    """Whether the p of a finding rests on random draws, which go with the order of rows and the seed."""
    return any(word in finding.p_method for word in ("draw", "bootstrap", "permut", "random"))


def numbers(examination, y_unit=1.0, x_unit=1.0):
    """Intervals, p-values, shares, factors and the words of the advice, on the first scale."""
    out = {}
    for row in examination.results.intervals:
        if row.remedy in DRAWN:
            continue
        unit = y_unit / (x_unit if row.term == "x" or row.term.startswith("x [") else 1.0)
        key = f"{row.remedy} {row.term} {len([k for k in out if k.startswith(f'{row.remedy} {row.term}')])}"
        out[key] = (row.estimate / unit, row.se / unit, row.df, row.p)
    for finding in examination.evidence:
        # A band is named by its length in the unit at hand; a season is known to calendar times alone.
        if by_draws(finding) or finding.about.startswith("band") or finding.test in ("season", "direction"):
            continue
        size = () if finding.test in IN_UNITS else (finding.estimate,)
        out[finding.structure, finding.test, finding.about, finding.given] = (finding.p, *size)
    out |= {("share", s.key): (s.share,) for s in examination.ledger.shares}
    out |= {("factor", i.term, i.key): (i.estimate,) for i in examination.ledger.inflation}
    return out


def words(examination):
    advice = examination.advice
    return advice.state, advice.remedy, advice.at, advice.structures, advice.protected


def check_same(kind, frame, y_unit=1.0, x_unit=1.0, skip=()):
    _, arguments, first = known(kind)
    again = examine(frame, **arguments)
    ours, theirs = numbers(first), numbers(again, y_unit, x_unit)
    assert ours.keys() == theirs.keys()
    for key, values in ours.items():
        if not any(part in str(key) for part in skip):
            np.testing.assert_allclose(values, theirs[key], rtol=2e-5, atol=1e-9, err_msg=str(key))
    assert words(again) == words(first)


@pytest.mark.parametrize("kind", [NESTED if kind == "nested" else kind for kind in KINDS])
def test_row_order_and_columns_that_no_one_asked_for(kind):
    frame, _, _ = known(kind)
    mixed = frame.assign(spare=frame["x"], word="a").sample(frac=1, random_state=1)
    check_same(kind, mixed)


@pytest.mark.parametrize("kind", [NESTED if kind == "nested" else kind for kind in KINDS])
def test_units_of_response_and_predictor(kind):
    frame, _, _ = known(kind)
    check_same(kind, frame.assign(y=frame["y"] * 1e-6, x=frame["x"] * 1e4), y_unit=1e-6, x_unit=1e4)


@pytest.mark.parametrize("kind", ["group", "time", NESTED])
def test_shift_of_the_response_moves_the_constant_alone(kind):
    frame, _, _ = known(kind)
    check_same(kind, frame.assign(y=frame["y"] + 1e4), skip=("constant",))


@pytest.mark.parametrize("kind", ["time", "panel"])
def test_unit_and_origin_of_time(kind):
    frame, _, _ = known(kind)
    check_same(kind, frame.assign(t=frame["t"] * 7 + 1900))
    check_same(kind, frame.assign(t=pd.Timestamp("2020-01-01") + pd.to_timedelta(frame["t"], unit="h")))


def test_unit_and_origin_of_coordinates():
    frame, _, _ = known("place")
    check_same("place", frame.assign(east=frame["east"] * 1000 + 5e5, north=frame["north"] * 1000 + 4e6))


@pytest.mark.parametrize("kind", ["group", NESTED])
def test_labels_of_groups(kind):
    frame, _, _ = known(kind)
    names = [name for name in ("g", "a", "b") if name in frame]
    renamed = frame.copy()
    for name in names:
        levels = list(dict.fromkeys(frame[name]))
        fresh = np.random.default_rng(2).permutation(len(levels))
        renamed[name] = frame[name].map({old: f"Z{k:03d}" for old, k in zip(levels, fresh, strict=True)})
    check_same(kind, renamed)
    if kind == "group":
        check_same(kind, frame.assign(g=pd.Categorical(frame["g"])))
        check_same(kind, frame.assign(g=pd.factorize(frame["g"])[0]))


@pytest.mark.parametrize("kind", ["panel", "place"])
def test_one_seed_gives_the_same_bytes_and_another_moves_only_what_is_drawn(kind):
    frame, arguments, first = known(kind)
    assert to_json(examine(frame, **arguments).results) == to_json(first.results)
    other = examine(frame, seed=99, **arguments)
    rows = zip(first.results.intervals, other.results.intervals, strict=True)
    np.testing.assert_array_equal(*zip(*((a.p, b.p) for a, b in rows if a.remedy not in DRAWN), strict=True))
    for one, two in zip(first.evidence, other.evidence, strict=True):
        if not by_draws(one) and np.isfinite(one.p):
            assert (one.test, one.p, one.statistic) == (two.test, two.p, two.statistic)
    assert words(other) == words(first)


# ---- weights -------------------------------------------------------------------------------------


@pytest.fixture(scope="module")
def weighted():
    rng = np.random.default_rng(5)
    g = np.repeat(np.arange(12), 5)
    x, weight = rng.standard_normal(60), rng.uniform(0.2, 5, 60)
    y = 1 + 0.5 * x + 0.6 * rng.standard_normal(12)[g] + rng.standard_normal(60) / np.sqrt(weight)
    count = rng.integers(1, 5, 60)
    return pd.DataFrame({"y": y, "x": x, "w": weight, "k": count, "g": [f"g{i}" for i in g]})


def test_precision_weights_are_statsmodels_wls(weighted):
    found = examine(weighted, model="y ~ x", group="g", weights="w")
    fit = smf.wls("y ~ x", weighted, weights=weighted["w"]).fit()
    rows = found.intervals[found.intervals.remedy == "ordinary"]
    np.testing.assert_allclose(rows["estimate"], fit.params, rtol=1e-10)
    np.testing.assert_allclose(rows["se"], fit.bse, rtol=1e-10)
    np.testing.assert_allclose(rows[["low", "high"]], fit.conf_int(), rtol=1e-9)
    robust = found.intervals[found.intervals.remedy == "heteroscedasticity-robust"]
    np.testing.assert_allclose(robust["se"], fit.get_robustcov_results("HC2").bse, rtol=1e-9)


def test_precision_weights_and_a_random_intercept_by_brute_force(weighted):
    """β̂ maximises the restricted likelihood of V = τ²ZZ' + σ²diag(1/ω), written out with n × n arrays."""
    from scipy import optimize

    found = examine(weighted, model="y ~ x", group="g", weights="w")
    X = np.column_stack([np.ones(60), weighted["x"]])
    y, Z = weighted["y"].to_numpy(), pd.get_dummies(weighted["g"]).to_numpy(dtype=float)

    def fit(theta):
        V = np.exp(theta[0]) * np.diag(1 / weighted["w"]) + np.exp(theta[1]) * Z @ Z.T
        inverse = np.linalg.inv(V)
        C = X.T @ inverse @ X
        b = np.linalg.solve(C, X.T @ inverse @ y)
        r = y - X @ b
        return np.linalg.slogdet(V)[1] + np.linalg.slogdet(C)[1] + r @ inverse @ r, b

    best = optimize.minimize(lambda t: fit(t)[0], [0.0, -1.0], method="Nelder-Mead", options={"fatol": 1e-11})
    rows = found.intervals[found.intervals.remedy == "mixed-intercept"]
    np.testing.assert_allclose(rows["estimate"], fit(best.x)[1], rtol=1e-4)


def test_the_scale_of_precision_weights_moves_no_interval(weighted):
    one = examine(weighted, model="y ~ x", group="g", weights="w").intervals
    many = examine(weighted.assign(w=1000 * weighted["w"]), model="y ~ x", group="g", weights="w").intervals
    np.testing.assert_allclose(one[["estimate", "se", "df"]], many[["estimate", "se", "df"]], rtol=1e-6)


def test_frequency_weights_are_repeated_rows(weighted):
    counted = examine(weighted, model="y ~ x", group="g", weights="k", weights_kind="frequency")
    repeated = weighted.loc[weighted.index.repeat(weighted["k"])].reset_index(drop=True)
    written = examine(repeated, model="y ~ x", group="g")
    columns = ["estimate", "se", "df", "low", "high", "p"]
    np.testing.assert_allclose(counted.intervals[columns], written.intervals[columns], rtol=1e-10)
    one, two = (
        {(f.test, f.about, f.given): f.verdict for f in found.evidence if f.test != "duplicates"}
        for found in (counted, written)
    )
    assert one == two
    assert counted.evidence.get("duplicates").verdict == "not applicable"  # its copies were declared


def test_weights_that_cannot_be_are_refused_or_counted(weighted):
    with pytest.raises(clingstone.InputError, match="negative in row 4"):
        clingstone.examine(
            weighted.assign(w=weighted["w"].where(weighted.index != 3, -1.0)), model="y ~ x", weights="w"
        )
    with pytest.raises(clingstone.InputError, match="not a whole number"):
        clingstone.examine(weighted, model="y ~ x", weights="w", weights_kind="frequency")
    with pytest.raises(clingstone.NotSupported, match="survey weights"):
        clingstone.examine(weighted, model="y ~ x", weights="w", weights_kind="survey")
    gone = examine(weighted.assign(w=weighted["w"].where(weighted.index != 3)), model="y ~ x", weights="w")
    assert gone.case.summary().dropped == {"missing w (weight)": 1}


def test_precision_weights_refuse_the_cosine_long_run_variance():
    frame, arguments, _ = known("time")
    found = examine(frame.assign(w=np.linspace(1, 2, len(frame))), weights="w", **arguments)
    assert "hac" not in set(found.intervals["remedy"])
    assert any(remedy == "hac" and "weights" in reason for remedy, reason, _ in found.advice.refused)
