"""Group remedies against published software: values copied with their call, data loaded from PyPI packages.

R 4.2.2 with clubSandwich 0.5.8, sandwich 3.0.2, plm 2.6.2; Python with pyfixest 0.60.0 and, for the wild
bootstrap, complete enumeration of the sign patterns by refits, in agreement with wildboottest 0.3.2; and, run
here, linearmodels and statsmodels.
"""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from tests.outside.test_remedies_outside import columns, data, grunfeld, machines, sleep
from tests.remedies.cases import design, fits

from clingstone.maths.partition import Partition
from clingstone.remedies import explain, refit, remedy
from clingstone.structure.group import Groups


def crossed(X, first, second):
    levels = (Partition.of("firm", first), Partition.of("year", second))
    return replace(design(X), group=Groups(levels, "crossed"))


def petersen():
    d = data("sandwich", "PetersenCL")
    return columns(d.x), d.y.to_numpy(float), d.firm.to_numpy(), d.year.to_numpy()


# ---- the jackknife --------------------------------------------------------------------------

# Each cluster left out in turn and lm() refitted, deviations from the full fit and from their mean, times
# (G − 1)/G; df of clubSandwich's CR3: coef_test(lm, vcov = "CR3", cluster, test = "Satterthwaite").
JACKKNIFE = {
    "grunfeld": (
        grunfeld,
        [34.8133821777445, 0.0161299720793489, 0.147330878065381],
        [34.4225287985061, 0.0160453382831104, 0.146364963198369],
        [4.49560839377083, 1.49715673645096, 2.15054981532008],
    ),
    "machines": (
        machines,
        [1.68071119573139, 2.42085078402583, 1.54009980436575],
        [1.68071119573139, 2.42085078402583, 1.54009980436575],
        [5, 5, 5],
    ),
    "sleepstudy": (
        sleep,
        [6.82455653206911, 1.54578889629473],
        [6.82455653206911, 1.54578889629473],
        [17, 17],
    ),
}


@pytest.mark.parametrize("name", JACKKNIFE)
def test_jackknife_equals_refits_without_each_cluster(name):
    load, full, mean, df = JACKKNIFE[name]
    X, y, group, _ = load()
    run = fits(design(X, group=group), y)
    result = refit(remedy("cluster-jackknife"), "clinic", run)
    assert [r.se for r in result.intervals] == pytest.approx(full, rel=1e-7)
    assert [r.df for r in result.intervals] == pytest.approx(df, rel=1e-6)
    about = refit(replace(remedy("cluster-jackknife"), centre="mean", df="clusters"), "clinic", run)
    assert [r.se for r in about.intervals] == pytest.approx(mean, rel=1e-7)


def test_jackknife_is_pyfixests_up_to_its_factors():
    # pyfixest feols(vcov={"CRV3": "firm"}): CR3 times √(G/(G − 1)·(N − 1)/(N − k)).
    X, y, group, _ = grunfeld()
    theirs = [38.877392882323704, 0.01801293705132229, 0.16452984662657683]
    found = refit(remedy("cluster-jackknife"), "clinic", fits(design(X, group=group), y))
    factor = 10 / 9 * np.sqrt(199 / 197)
    assert [r.se * factor for r in found.intervals] == pytest.approx(theirs, rel=1e-7)


# ---- two ways -------------------------------------------------------------------------------

# sandwich::vcovCL(lm, cluster = ~ firm + year): type "HC1" (each piece its own G), and "HC0" with
# cadjust = FALSE.
TWO_WAY = {
    "grunfeld": (
        grunfeld,
        [19.716680683803, 0.0163951494501116, 0.0795431892874803],
        [18.4114212949347, 0.0154344861096597, 0.0740718418387632],
    ),
    "petersen": (
        petersen,
        [0.0650639181993894, 0.0535580229449379],
        [0.0645675221227364, 0.0524544636386095],
    ),
}


@pytest.mark.parametrize("name", TWO_WAY)
def test_two_way_clusters_equal_sandwich(name):
    load, own, bare = TWO_WAY[name]
    X, y, firm, year = load()
    found = dict(explain(remedy("multiway-cluster"), "firm + year", fits(crossed(X, firm, year), y)))
    own_rows = found["each piece with its own number of clusters"]
    assert [r.se for r in own_rows] == pytest.approx(own, rel=1e-7)
    bare_rows = found["no small-sample factor, a normal quantile"]
    assert [r.se for r in bare_rows] == pytest.approx(bare, rel=1e-7)


def test_two_way_clusters_with_the_smaller_number_equal_pyfixest():
    # pyfixest feols(vcov={"CRV1": "firm + year"}), its default factors.
    X, y, firm, year = grunfeld()
    theirs = [19.50560773573915, 0.01635175399199424, 0.07847391399207858]
    result = refit(remedy("multiway-cluster"), "firm + year", fits(crossed(X, firm, year), y))
    assert [r.se for r in result.intervals] == pytest.approx(theirs, rel=1e-7)
    assert dict(result.account.items)["repair"] == "not needed"


def test_petersens_published_slope_errors():
    # Petersen (2009), standard errors of the slope in his test data, to the six digits that are quoted from
    # his page: by firm 0.050596, by year 0.033389, by both 0.053561. The last leaves the intersections,
    # which hold one row each, without G/(G − 1); that factor moves the fifth digit.
    X, y, firm, year = petersen()
    run = fits(crossed(X, firm, year), y)
    cr1 = replace(remedy("cluster-robust"), kind="CR1S", df="clusters")
    assert refit(cr1, "firm", run).get("x1").se == pytest.approx(0.050596, abs=6e-7)
    assert refit(cr1, "year", run).get("x1").se == pytest.approx(0.033389, abs=6e-7)
    both = replace(remedy("multiway-cluster"), factor="own", repair="none")
    assert refit(both, "firm + year", run).get("x1").se == pytest.approx(0.053561, abs=5e-6)


def test_two_way_clusters_equal_linearmodels_run_here():
    pd = pytest.importorskip("pandas")
    linearmodels = pytest.importorskip("linearmodels")
    X, y, firm, year = grunfeld()
    index = pd.MultiIndex.from_arrays([firm, year])
    frame = pd.DataFrame(X, index=index, columns=["constant", "x1", "x2"])
    model = linearmodels.PooledOLS(pd.Series(y, index=index), frame)
    fit = model.fit(
        cov_type="clustered", cluster_entity=True, cluster_time=True, debiased=True, group_debias=True
    )
    found = dict(explain(remedy("multiway-cluster"), "firm + year", fits(crossed(X, firm, year), y)))
    ours = [r.se for r in found["each piece with its own number of clusters"]]
    assert ours == pytest.approx(fit.std_errors.to_numpy(), rel=1e-7)


# ---- the wild bootstrap -----------------------------------------------------------------------

# All 2^G sign patterns, each refitted with the null imposed; patterns that tie with the observed t, the
# identity and its opposite among them, count as at least as large.
WILD = {
    "grunfeld": (grunfeld, 1, 4 / 1024, 7.270649831813566),
    "grunfeld capital": (grunfeld, 2, 24 / 1024, 2.71491500154237),
    "machines B": (machines, 1, 4 / 64, 3.228165398616557),
}


@pytest.mark.parametrize("name", WILD)
def test_wild_bootstrap_equals_complete_enumeration(name):
    load, j, p, t = WILD[name]
    X, y, group, _ = load()
    signs = replace(remedy("wild-cluster-bootstrap"), kind="signs")
    row = refit(signs, "clinic", fits(design(X, group=group), y)).intervals[j]
    assert row.p == p
    assert row.estimate / row.se == pytest.approx(t, rel=1e-9)


def test_wild_bootstrap_of_eight_subjects_equals_complete_enumeration():
    # The eight lowest subjects of the unbalanced sleepstudy: 6 of 256 patterns at least as large.
    X, y, group, _ = sleep(unbalanced=True)
    some = group <= np.unique(group)[7]
    run = fits(design(X[some], group=group[some]), y[some])
    row = refit(remedy("wild-cluster-bootstrap"), "clinic", run).intervals[1]
    assert row.p == 6 / 256
    assert row.estimate == pytest.approx(13.5275116506878)


def test_wild_bootstrap_of_eighteen_subjects_is_within_its_draws():
    # Of 2^18 patterns 6 are at least as large: p = 2.3e-5, so 9,999 draws hold 0.2 of them on average.
    X, y, group, _ = sleep()
    row = refit(remedy("wild-cluster-bootstrap"), "clinic", fits(design(X, group=group), y)).intervals[1]
    assert row.p <= 4 / 10_000
    assert row.estimate / row.se == pytest.approx(6.7525435107586445, rel=1e-9)


# ---- within and between -------------------------------------------------------------------------


def test_absorbed_groups_equal_plm():
    # plm(model = "within"); vcovHC(method = "arellano", type = "sss"), the same without the factor.
    X, y, firm, year = grunfeld()
    run = fits(crossed(X, firm, year), y)
    result = refit(replace(remedy("fixed-effects"), kind="CR1S"), "firm", run)
    assert [r.estimate for r in result.intervals[1:]] == pytest.approx(
        [0.110123804120718, 0.310065341300139], rel=1e-9
    )
    assert [r.se for r in result.intervals[1:]] == pytest.approx(
        [0.0151560754389038, 0.0526183915914517], rel=1e-7
    )
    bare = refit(replace(remedy("fixed-effects"), kind="CR0"), "firm", run)
    assert [r.se for r in bare.intervals[1:]] == pytest.approx(
        [0.0143421437123503, 0.0497926087237731], rel=1e-7
    )


def test_absorbed_firms_and_years_equal_linearmodels_run_here():
    pd = pytest.importorskip("pandas")
    linearmodels = pytest.importorskip("linearmodels")
    X, y, firm, year = grunfeld()
    index = pd.MultiIndex.from_arrays([firm, year])
    frame = pd.DataFrame(X[:, 1:], index=index, columns=["x1", "x2"])
    model = linearmodels.PanelOLS(pd.Series(y, index=index), frame, entity_effects=True, time_effects=True)
    fit = model.fit(cov_type="clustered", cluster_entity=True, debiased=False)
    bare = refit(replace(remedy("fixed-effects"), kind="CR0"), "firm + year", fits(crossed(X, firm, year), y))
    ours = bare.intervals[1:]
    assert [r.estimate for r in ours] == pytest.approx(fit.params.to_numpy(), rel=1e-8)
    # Theirs carries √(n/(n − effects)), with 10 + 20 − 1 effects, even without the small-sample option.
    scaled = [r.se * np.sqrt(200 / (200 - 29)) for r in ours]
    assert scaled == pytest.approx(fit.std_errors.to_numpy(), rel=1e-8)


def test_between_part_equals_plms_regression_on_group_means():
    # plm(random) with group means added: value 0.1101, capital 0.3101, their means 0.0245 and −0.2780; in a
    # balanced panel the same coefficients as least squares.
    X, y, firm, _ = grunfeld()
    result = refit(remedy("within-between"), "clinic", fits(design(X, group=firm), y))
    assert result.get("constant").estimate == pytest.approx(-8.52711372172717, rel=1e-8)
    for name, within, added in (
        ("x1", 0.110123804120719, 0.0245222828511931),
        ("x2", 0.310065341300139, -0.278033866968729),
    ):
        assert result.get(f"{name} [within]").estimate == pytest.approx(within, rel=1e-9)
        assert result.get(f"{name} [between]").estimate == pytest.approx(within + added, rel=1e-8)
    # The same regression's standard error of the constant is that of the firms' means.
    means = refit(remedy("group-means"), "clinic", fits(design(X, group=firm), y))
    assert means.get("constant").se == pytest.approx(47.5153077358229, rel=1e-8)


def test_group_means_equal_statsmodels_run_here():
    sm = pytest.importorskip("statsmodels.api")
    X, y, firm, _ = grunfeld()
    Z = np.array([X[firm == f].mean(axis=0) for f in np.unique(firm)])
    v = np.array([y[firm == f].mean() for f in np.unique(firm)])
    fit = sm.OLS(v, Z).fit()
    result = refit(remedy("group-means"), "clinic", fits(design(X, group=firm), y))
    assert [r.p for r in result.intervals] == pytest.approx(fit.pvalues, rel=1e-8)
    hc2 = refit(replace(remedy("group-means"), kind="HC2"), "clinic", fits(design(X, group=firm), y))
    assert [r.se for r in hc2.intervals] == pytest.approx(fit.HC2_se, rel=1e-8)
