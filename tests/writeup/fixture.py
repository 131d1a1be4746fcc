"""Invented results for the write-up: a trial in clinics, a stream gauge, wells on a map.

The numbers are made up to look like real ones and are only a load for the pages; no test here
treats them as a statistical truth.
"""

from __future__ import annotations

import math
from dataclasses import replace

import numpy as np

from clingstone.advice.choose import Advice, Choice, Reason
from clingstone.evidence.finding import Curve, Finding
from clingstone.ledger.ledger import Detectable, Inflation, Ledger, Parameter, Share, Standing, Tipping
from clingstone.remedies.remedy import Account, Interval, JointTest, Refit
from clingstone.results import SCHEMA, Results
from clingstone.summary import CaseSummary, GroupSummary, SerialSummary, SpatialSummary

NAN = math.nan
VERSIONS = {"clingstone": "0.1.0", "python": "3.12.4", "numpy": "2.4.0", "scipy": "1.17.0"}


def finding(structure: str, test: str, **changes: object) -> Finding:
    base = Finding(
        structure=structure,  # type: ignore[arg-type]
        test=test,
        about="",
        about_words="",
        statistic=2.41,
        statistic_name="F",
        df=11.0,
        df2=398.0,
        alternative="larger",
        p=0.0063,
        p_method="exact",
        p_adjusted=None,
        estimate=0.1,
        estimate_name="effect",
        low=0.02,
        high=0.3,
        n_used=412,
        verdict="unclear",
        caveats=(),
        sentence="Nothing to say.",
        source="searle-1971",
        null="the rows are independent",
    )
    return replace(base, **changes)  # type: ignore[arg-type]


def refit(
    remedy: str,
    name: str,
    rows: dict[str, tuple[float, float, float, float]],
    ordinary: dict[str, float],
    **more: object,
) -> Refit:
    """rows: coefficient → estimate, se, df, p."""
    from scipy import stats

    intervals = []
    for term, (estimate, se, df, p) in rows.items():
        half = float(stats.t.ppf(0.975, df)) * se
        status = str(more.get("status", "ok"))
        intervals.append(
            Interval(
                term,
                remedy,
                estimate,
                se,
                se / ordinary[term],
                df,
                str(more.get("df_rule", "residual")),
                estimate - half,
                estimate + half,
                p,
                status,
            )
        )
    account = more.get("account") or Account(
        "ordinary least squares", "s²(X′X)⁻¹", "n/(n − p)", "residual: n − p", "t", (), ""
    )
    return Refit(
        remedy=remedy,
        name=name,
        at=str(more.get("at", "")),
        covers=more.get("covers", ()),  # type: ignore[arg-type]
        estimand="pooled",
        intervals=tuple(intervals),
        terms=more.get("terms", ()),  # type: ignore[arg-type]
        account=account,  # type: ignore[arg-type]
        coefficients=tuple(rows),
        estimate=tuple(r[0] for r in rows.values()),
        notes=more.get("notes", ()),  # type: ignore[arg-type]
        boundary=bool(more.get("boundary", False)),
    )


SIZES = (71, 60, 52, 44, 38, 33, 29, 26, 21, 17, 12, 9)
EFFECTIVE = sum(SIZES) ** 2 / sum(s * s for s in SIZES)
CLINICS = (
    "Alderford",
    "Brook",
    "Combe",
    "Dunmoor",
    "Eskdale",
    "Fellgate",
    "Garth",
    "Holm",
    "Ings",
    "Kirkby",
    "Lathe",
    "Mardale",
)


def group_curve() -> Curve:
    rng = np.random.default_rng(4)
    means = np.sort(rng.normal(0, 2.1, 12))
    half = 1.96 * 5.2 / np.sqrt(np.array(SIZES))
    return Curve(
        "group-means",
        tuple(float(i) for i in range(12)),
        tuple(means.tolist()),
        tuple((means - half).tolist()),
        tuple((means + half).tolist()),
        tuple(float(s) for s in SIZES),
        CLINICS,
        "clinic",
        "mean residual",
        "mmHg",
    )


def trial(hostile: str = "") -> Results:
    """A trial in 12 clinics, arm assigned by clinic."""
    clinic = "clinic" + hostile
    arm = "arm: treated" + hostile
    names = ("constant", arm, "age")
    ordinary = {"constant": 1.9, arm: 0.71, "age": 0.021}
    rows = lambda *v: dict(zip(names, v, strict=True))  # noqa: E731
    naive = refit(
        "ordinary",
        "ordinary fit",
        rows((131.2, 1.9, 409, 1e-30), (-3.1, 0.71, 409, 1.6e-5), (0.214, 0.021, 409, 2e-21)),
        ordinary,
    )
    mixed = refit(
        "mixed-intercept",
        f"mixed model, intercept per {clinic}",
        rows((131.0, 2.6, 14.2, 1e-12), (-3.1, 1.49, 10.4, 0.063), (0.209, 0.020, 402.3, 3e-22)),
        ordinary,
        at=clinic,
        covers=("group",),
        df_rule="Kenward–Roger",
        account=Account(
            f"generalised least squares with a random intercept per {clinic}, variance by restricted "
            "maximum likelihood",
            "Kenward–Roger adjusted (X′V⁻¹X)⁻¹",
            "none beyond the adjustment",
            "Kenward–Roger, expected information",
            "t",
            (
                ("intraclass correlation", "0.18"),
                ("between standard deviation", "2.3"),
                ("row standard deviation", "4.9"),
            ),
            "kenward-roger-1997, patterson-thompson-1971",
        ),
    )
    robust = refit(
        "cluster-robust",
        f"cluster-robust, by {clinic}",
        rows((131.2, 2.7, 7.7, 1e-9), (-3.1, 1.65, 8.1, 0.097), (0.214, 0.024, 6.9, 4e-5)),
        ordinary,
        at=clinic,
        covers=("group",),
        df_rule="Satterthwaite, identity working model",
        account=Account(
            "ordinary least squares",
            "sandwich of score sums per cluster, CR2",
            "(I − H_g)^(−1/2) on the residuals of each cluster",
            "Satterthwaite, identity working model",
            "t",
            (("clusters", "12"), ("effective clusters for the arm", "9.8")),
            "bell-mccaffrey-2002, pustejovsky-tipton-2018",
        ),
        terms=(JointTest("season", "cluster-robust", 1.9, 2, 6.2, 0.23),),
    )
    few = refit(
        "heteroscedasticity-robust",
        "robust to unequal variances",
        rows((131.2, 1.95, 300.1, 1e-30), (-3.1, 0.74, 322.5, 4e-5), (0.214, 0.022, 250.3, 2e-19)),
        ordinary,
        df_rule="Satterthwaite",
        account=Account(
            "ordinary least squares", "HC2", "1/(1 − h)", "Satterthwaite", "t", (), "mackinnon-white-1985"
        ),
    )
    evidence = (
        finding(
            "group",
            "group-f",
            about=clinic,
            about_words=f"rows of one {clinic}",
            statistic=7.6,
            p=3.1e-11,
            p_adjusted=3.1e-11,
            estimate=0.18,
            low=0.06,
            high=0.41,
            estimate_name="intraclass correlation",
            verdict="present",
            primary=True,
            sentence=f"Rows of one {clinic} share 18 % (6 to 41 %) of what the model leaves over "
            "(F = 7.6 on 11 and 398 degrees of freedom, p < 10⁻⁶).",
            source="searle-1971",
            curve=group_curve(),
        ),
        finding(
            "mean",
            "functional-form",
            about="age",
            about_words="curve in age",
            statistic=0.9,
            df=3.0,
            df2=395.0,
            p=0.44,
            estimate=0.004,
            low=0.0,
            high=0.02,
            estimate_name="share explained",
            verdict="not detected",
            sentence="A curve in age would explain 0.4 % (0 to 2 %) more (F = 0.9, p = 0.44).",
            source="ramsey-1969",
        ),
        finding(
            "lookalike",
            "heteroscedasticity",
            about_words="spread against the fitted values",
            statistic=5.1,
            statistic_name="χ²",
            df=2.0,
            df2=None,
            p=0.078,
            estimate=NAN,
            low=NAN,
            high=NAN,
            verdict="unclear",
            sentence="The spread may change with the fitted values (χ² = 5.1, p = 0.078).",
            source="koenker-1981",
            caveats=("Read with care: a group effect looks like unequal spread.",),
        ),
        finding(
            "lookalike",
            "duplicates",
            statistic=NAN,
            statistic_name="",
            df=None,
            df2=None,
            p=NAN,
            estimate=NAN,
            low=NAN,
            high=NAN,
            verdict="not applicable",
            sentence="No two rows agree in every column.",
            source="",
        ),
    )
    key = f"group:{clinic}"
    ledger = Ledger(
        model=(key,),
        standing=(
            Standing(
                "group", key, clinic, "present", 3.1e-11, NAN, (), f"the rows of one {clinic} hang together"
            ),
        ),
        shares=(
            Share("group", key, clinic, 0.18, 0.06, 0.41),
            Share(None, "row", "row noise", 0.82, 0.59, 0.94),
        ),
        parameters=(
            Parameter(key, "intraclass correlation", 0.18, 0.06, 0.41),
            Parameter(key, "standard deviation", 2.3, 1.3, 4.2, "mmHg"),
            Parameter("row", "standard deviation", 4.9, 4.6, 5.3, "mmHg"),
        ),
        inflation=(
            Inflation(arm, key, 1.7, 4.6, 9.4),
            Inflation(arm, "row", 0.94, 0.82, 0.6),
            Inflation(arm, "total", 1.62, 2.33, 3.16),
            Inflation("age", key, 0.01, 0.02, 0.06),
            Inflation("age", "row", 0.94, 0.83, 0.6),
            Inflation("age", "total", 0.97, 0.92, 0.81),
        ),
        tipping=(
            Tipping(
                arm,
                key,
                "intraclass correlation",
                0.12,
                f"The interval for {arm} would take in zero for an intraclass correlation above 0.12.",
            ),
        ),
        detectable=(
            Detectable(
                key,
                "intraclass correlation",
                0.04,
                0.8,
                "The test would have found an intraclass correlation of 0.04 or more in 80 % of such data.",
            ),
        ),
        history=("full model kept: the clinic component is present",),
    )
    advice = Advice(
        state="supported with caveat",
        headline=f"The rows of a {clinic} hang together: they share 18 % (6 to 41 %) of what the model "
        "leaves over. "
        f"It matters for {arm}: its interval should be 2.3 times as wide.",
        structures=frozenset({"group"}),
        levels=(clinic,),
        protected=frozenset(),
        remedy="mixed-intercept",
        at=clinic,
        mean_in_doubt=False,
        because=(
            Reason(
                f"The arm was assigned by {clinic}.",
                "assigned-level",
                (("assigned level", clinic),),
                "abadie-2023",
                "strong",
            ),
            Reason(
                "12 clinics are few, and the mixed model keeps its degrees of freedom honest.",
                "few-groups",
                (("groups", "12"),),
                "kenward-roger-1997",
                "moderate",
            ),
        ),
        cautions=(
            Reason(
                "Two clinics carry 40 % of the information on arm.",
                "lopsided",
                (("largest share", "0.40"),),
                "carter-schnepel-steigerwald-2017",
                "moderate",
            ),
        ),
        alternatives=(Choice("cluster-robust", clinic, "It does not trust the model of the dependence."),),
        refused=(
            ("ar1", "no serial structure was declared", "Name the time column with time=."),
            (
                "spatial-gls",
                "no spatial structure was declared",
                "Name the two coordinate columns with coords=.",
            ),
        ),
    )
    case = CaseSummary(
        name="trial.csv",
        n=412,
        p=3,
        response="pressure",
        formula="pressure ~ arm + age",
        terms=("constant", "arm", "age"),
        coefficients=names,
        focus=("arm",) if not hostile else (arm,),
        varies={"constant": "constant", "arm": clinic, "age": "row"},
        group=(
            GroupSummary(clinic, 12, 9, 31.0, 71, 0.56, 0, "", CLINICS, SIZES, EFFECTIVE, SIZES, CLINICS),
        ),
        arrangement="one level",
        serial=None,
        spatial=None,
        assigned={"arm": clinic},
        sampled="",
        dropped={"missing pressure": 9, "missing age": 2},
        rows_read=423,
        notes=("One clinic's label appears with and without a trailing blank; read as one.",),
        origin={
            "file": "trial.csv",
            "encoding": "utf-8",
            "separator": ",",
            "decimal mark": ".",
            "fingerprint": "9f2c41d0",
        },
    )
    return Results(
        clingstone="0.1.0",
        schema=SCHEMA,
        case=case,
        evidence=evidence,
        ledger=ledger,
        advice=advice,
        refits=(naive, mixed, robust, few),
        rehearsal=None,
        methods="",
        references=(),
        settings={
            "model": "pressure ~ arm + age",
            "group": clinic,
            "assigned": {"arm": clinic},
            "confidence": 0.95,
            "seed": 0,
        },
        versions=VERSIONS,
    )


def stream() -> Results:
    """A stream gauge by day with gaps: one series."""
    base = trial()
    names = ("constant", "rain", "elapsed")
    ordinary = {"constant": 0.11, "rain": 0.0032, "elapsed": 0.00031}
    rows = lambda *v: dict(zip(names, v, strict=True))  # noqa: E731
    naive = refit(
        "ordinary",
        "ordinary fit",
        rows((2.31, 0.11, 697, 1e-60), (0.0412, 0.0032, 697, 1e-30), (-0.00071, 0.00031, 697, 0.022)),
        ordinary,
    )
    ar1 = refit(
        "ar1",
        "AR(1) errors, exact likelihood",
        rows((2.29, 0.27, 61.2, 1e-11), (0.0391, 0.0024, 410.0, 1e-40), (-0.00068, 0.00083, 58.4, 0.42)),
        ordinary,
        covers=("serial",),
        df_rule="Satterthwaite",
        account=Account(
            "generalised least squares with first-order autoregressive errors",
            "(X′V⁻¹X)⁻¹ at the restricted-likelihood ρ",
            "none",
            "Satterthwaite, observed information",
            "t",
            (("ρ per day", "0.71"),),
            "satterthwaite-1946",
        ),
    )
    lags = np.arange(1, 21)
    r = 0.7**lags + np.random.default_rng(2).normal(0, 0.03, 20)
    band = 1.96 / np.sqrt(690.0 - 9 * lags)
    curve = Curve(
        "autocorrelation",
        tuple(map(float, lags)),
        tuple(r.tolist()),
        tuple((-band).tolist()),
        tuple(band.tolist()),
        tuple((690.0 - 9 * lags).tolist()),
        (),
        "elapsed time",
        "correlation",
        "day",
    )
    evidence = (
        finding(
            "serial",
            "durbin-watson",
            about="1",
            about_words="one day apart",
            statistic=0.61,
            statistic_name="d",
            df=None,
            df2=None,
            p=4e-40,
            p_adjusted=4e-40,
            estimate=0.69,
            low=0.63,
            high=0.74,
            estimate_name="correlation one day apart",
            verdict="present",
            primary=True,
            source="durbin-watson-1950",
            curve=curve,
            sentence="Residuals one day apart correlate by 0.69 (0.63 to 0.74) (d = 0.61, p < 10⁻⁶).",
        ),
        finding(
            "mean",
            "trend",
            about="elapsed",
            about_words="curve in time",
            statistic=1.2,
            df=2.0,
            df2=60.0,
            p=0.31,
            estimate=0.01,
            low=0.0,
            high=0.05,
            estimate_name="share explained",
            verdict="not detected",
            source="ramsey-1969",
            sentence="A curve in time would explain 1 % (0 to 5 %) more.",
            curve=Curve(
                "function",
                tuple(np.linspace(0, 700, 200).tolist()),
                tuple(np.random.default_rng(3).normal(0, 1, 200).tolist()),
                x_name="elapsed time",
                y_name="partial residual",
                unit="day",
                lines={"fitted": ((0.0, 350.0, 700.0), (0.0, 0.1, -0.1))},
            ),
        ),
    )
    case = replace(
        base.case,
        name="stream.csv",
        n=700,
        response="log(flow)",
        formula="log(flow) ~ rain + elapsed",
        terms=names,
        coefficients=names,
        focus=("rain", "elapsed"),
        varies={"rain": "row", "elapsed": "row"},
        group=(),
        arrangement="",
        serial=SerialSummary(
            "day", "all rows", 1, 700, 700, "regular with gaps", 1.0, "day", 31, 0, "2021-03-01", "2023-03-01"
        ),
        assigned={},
        dropped={},
        rows_read=700,
        notes=(),
        transformed="log",
        origin={"file": "stream.csv", "fingerprint": "77ab01ce"},
    )
    ledger = Ledger(
        model=("serial",),
        standing=(
            Standing(
                "serial",
                "serial",
                "days of the gauge",
                "present",
                4e-40,
                NAN,
                (),
                "neighbouring days hang together",
            ),
        ),
        shares=(
            Share("serial", "serial", "serial", 0.93, 0.81, 0.98),
            Share(None, "row", "row noise", 0.07, 0.02, 0.19),
        ),
        parameters=(
            Parameter("serial", "ρ", 0.71, 0.65, 0.77, "per day"),
            Parameter("serial", "half-life", 2.0, 1.6, 2.7, "day"),
        ),
        inflation=(
            Inflation("rain", "serial", 0.4, 0.5, 0.6),
            Inflation("rain", "total", 0.72, 0.78, 0.83),
            Inflation("elapsed", "serial", 5.9, 7.1, 8.4),
            Inflation("elapsed", "total", 2.4, 2.7, 2.9),
        ),
        tipping=(
            Tipping(
                "rain",
                "serial",
                "ρ",
                None,
                "No ρ between 0 and 0.95 would take the interval for rain to zero.",
            ),
        ),
        detectable=(),
    )
    advice = replace(
        base.advice,
        state="supported",
        remedy="ar1",
        at="",
        levels=("all rows",),
        structures=frozenset({"serial"}),
        headline="Days that follow each other hang together: one day apart, residuals correlate by 0.69 "
        "(0.63 to 0.74). "
        "It matters for elapsed: its interval should be 2.7 times as wide.",
        because=(
            Reason(
                "One regular series of 700 days carries a first-order autoregression.",
                "one-series",
                (),
                "patterson-thompson-1971",
                "strong",
            ),
        ),
        cautions=(),
        alternatives=(),
        refused=(("hac", "31 missing days", "A series without gaps, or the other remedies."),),
    )
    return replace(
        base,
        case=case,
        evidence=evidence,
        ledger=ledger,
        advice=advice,
        refits=(naive, ar1),
        settings={"model": case.formula, "time": "day", "confidence": 0.95, "seed": 0},
    )


def wells() -> Results:
    """Wells on a map, sampled several times; nothing can be corrected (too few sites)."""
    base = stream()
    rng = np.random.default_rng(8)
    x, y = rng.uniform(431, 448, 60), rng.uniform(512, 523, 60)
    value = np.sin(x / 3) + np.cos(y / 2) + rng.normal(0, 0.4, 60)
    h = np.linspace(0.8, 8, 10)
    gamma = 0.4 + 0.7 * (1 - np.exp(-h / 2.1))
    vario = Curve(
        "variogram",
        tuple(h.tolist()),
        tuple((gamma + rng.normal(0, 0.05, 10)).tolist()),
        tuple([0.85] * 10),
        tuple([1.2] * 10),
        tuple((h * 40).tolist()),
        (),
        "distance",
        "half mean squared difference",
        "km",
        lines={"fitted": (tuple(h.tolist()), tuple(gamma.tolist()))},
    )
    chart = Curve(
        "map",
        tuple(x.tolist()),
        tuple(y.tolist()),
        size=tuple(value.tolist()),
        x_name="easting",
        y_name="northing",
        unit="km",
    )
    evidence = (
        finding(
            "spatial",
            "moran",
            about="knn:6",
            about_words="the 6 nearest sites",
            statistic=0.31,
            statistic_name="I",
            df=None,
            df2=None,
            p=2.2e-5,
            p_adjusted=2.2e-5,
            estimate=0.38,
            low=0.2,
            high=0.56,
            estimate_name="rescaled Moran's I",
            verdict="present",
            primary=True,
            source="moran-1950, cliff-ord-1981",
            curve=chart,
            sentence="A well resembles its 6 nearest wells: 0.38 (0.20 to 0.56) of what is attainable "
            "(I = 0.31, p = 2 × 10⁻⁵).",
        ),
        finding(
            "spatial",
            "variogram",
            about_words="half squared differences by distance",
            statistic=NAN,
            statistic_name="",
            df=None,
            df2=None,
            p=NAN,
            estimate=NAN,
            low=NAN,
            high=NAN,
            verdict="unclear",
            source="cressie-1993",
            curve=vario,
            sentence="Nearby wells differ less than distant ones up to about 6 km.",
        ),
    )
    case = replace(
        base.case,
        name="wells.csv",
        serial=None,
        transformed="",
        response="nitrate",
        formula="nitrate ~ depth + elapsed",
        spatial=SpatialSummary(
            ("easting", "northing"),
            "planar",
            60,
            11.7,
            19.2,
            "km",
            ("6 nearest sites",),
            0,
            tuple(x.tolist()),
            tuple(y.tolist()),
        ),
    )
    ledger = Ledger(
        model=("spatial",),
        standing=(
            Standing("spatial", "spatial", "wells", "present", 2.2e-5, NAN, (), "near wells hang together"),
        ),
        shares=(
            Share("spatial", "spatial", "spatial", 0.6, 0.3, 0.85),
            Share(None, "row", "row noise", 0.4, 0.15, 0.7),
        ),
        parameters=(Parameter("spatial", "practical range", 6.3, 2.9, 14.0, "km"),),
        inflation=(Inflation("rain", "total", 1.2, 1.8, 2.6), Inflation("elapsed", "total", 0.98, 1.0, 1.01)),
        tipping=(),
        detectable=(),
    )
    advice = replace(
        base.advice,
        state="not correctable",
        remedy="",
        at="",
        levels=(),
        structures=frozenset({"spatial"}),
        because=(),
        headline="Near wells resemble each other, and these data cannot carry a correction.",
        refused=(
            (
                "spatial-gls",
                "the range is half as long as the map",
                "Sites over a wider area would be needed.",
            ),
        ),
    )
    return replace(base, case=case, evidence=evidence, ledger=ledger, advice=advice, refits=base.refits[:1])


HOSTILE = (
    "</td><script>alert('x')</script>\"' onload=\"alert(1)\n"
    "\u05d2\u05d9\u05dc 7 \U0001f411\u202e|*_$\\\\{}#%&~^"
)


def hostile() -> Results:
    """The trial with a group and a coefficient whose names try everything that a name can."""
    return trial(HOSTILE)
