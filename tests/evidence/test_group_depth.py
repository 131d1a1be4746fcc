"""Groups to full depth: score, restricted ratio, level, between and within, slopes, one by one."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from scipy import stats

from clingstone.design.design import Term
from clingstone.evidence.endogeneity import GroupEndogeneity
from clingstone.evidence.finding import About
from clingstone.evidence.gather import gather
from clingstone.evidence.grouplm import GroupLM, scores
from clingstone.evidence.influence import GroupInfluence, influence
from clingstone.evidence.levels import ClusterLevel, _alike, _reach, sums
from clingstone.evidence.restricted import RestrictedLR
from clingstone.evidence.slopes import SlopeVariation, spread
from clingstone.needs import NotSupported
from tests.evidence import factories as make

TESTS = (GroupLM(), RestrictedLR(), ClusterLevel(), GroupEndogeneity(), SlopeVariation(), GroupInfluence())
LEVEL = About("g", "rows of one g")


def world(seed=1, G=12, tau=0.8, slope=0.0, between=0.0, B=None, weights=False, known=True):
    """Unequal groups, a row-level x whose group means differ, an arm by group."""
    rng = np.random.default_rng(seed)
    g = np.repeat(np.arange(G), rng.integers(3, 10, G))
    mean = rng.normal(size=G)
    x = mean[g] + rng.normal(size=len(g))
    arm = (g % 2).astype(float)
    shape = (B or 1,)
    b0, b1 = rng.normal(size=(G, *shape)), rng.normal(size=(G, *shape))
    y = tau * b0[g] + slope * b1[g] * x[:, None] + between * mean[g, None] + rng.normal(size=(len(g), *shape))
    w = rng.uniform(0.5, 2, len(g)) if weights else None
    made = make.design(x, arm, groups={"g": g}, weights=w, known=known)
    return made, y if B else y[:, 0], g, x


def found(tests=TESTS, **more):
    made, y, *_ = world(**more)
    return gather(make.fits(made, y), tests)


# ---- group-lm ----


def test_score_tail_equals_imhofs_integral():
    made, y, g, x = world(tau=0.3)
    f = make.fits(made, y)
    reading = GroupLM().read(f, LEVEL)
    Z = (g[:, None] == np.arange(12)).astype(float)
    C = make.residual_space(np.ones(len(g)), x, (g % 2).astype(float))
    e = f.response.residual[:, 0]
    T = float(e @ Z @ Z.T @ e / (e @ e))
    assert reading.p[0] == pytest.approx(make.imhof(C.T @ Z @ Z.T @ C, T), abs=1e-6)
    A = C.T @ Z @ Z.T @ C
    m = C.shape[1]
    mean = np.trace(A) / m
    variance = 2 * (np.trace(A @ A) - np.trace(A) ** 2 / m) / (m * (m + 2))
    assert reading.statistic[0] == pytest.approx((T - mean) / np.sqrt(variance), rel=1e-9)


def test_conventional_scores_by_hand():
    made, y, g, _ = world()
    f = make.fits(made, y)
    part, e = made.group.finest, f.response.residual[:, 0]
    A = np.sum(part.sums(e) ** 2) / (e @ e) - 1
    n, sizes = len(g), part.sizes
    pagan = n**2 * A**2 / (2 * (np.sum(sizes.astype(float) ** 2) - n))
    got = scores(f.response, part)
    assert got.pagan[0] == pytest.approx(pagan, rel=1e-12)
    assert got.honda[0] == pytest.approx(np.sign(A) * np.sqrt(pagan), rel=1e-12)


def test_score_size_without_groups_and_power_with_them():
    made, y, *_ = world(tau=0.0, B=2000, seed=3)
    p = GroupLM().read(make.fits(made, y), LEVEL).p
    assert np.mean(p < 0.05) == pytest.approx(0.05, abs=3 * np.sqrt(0.05 * 0.95 / 2000))
    made, y, *_ = world(tau=0.7, B=200, seed=3)
    assert np.mean(GroupLM().read(make.fits(made, y), LEVEL).p < 0.05) > 0.6


# ---- restricted-lr ----


def test_restricted_ratio_size_alone_and_given_another_level():
    rng = np.random.default_rng(2)
    inner = np.repeat(np.arange(24), 4)
    outer = inner // 3
    made = make.design(rng.normal(size=96), groups={"o": outer, "o/g": inner})
    Y = rng.normal(size=(24, 400))[inner] + rng.normal(size=(96, 400))
    f = make.fits(made, Y)
    given = RestrictedLR().read(f, About("o", "rows of one o"), frozenset({"group:o/g"}))
    assert np.mean(given.p < 0.05) == pytest.approx(0.05, abs=3 * np.sqrt(0.05 * 0.95 / 400))
    plain = make.fits(made, rng.normal(size=(96, 400)))
    alone = RestrictedLR().read(plain, About("o", "rows of one o"))
    assert np.mean(alone.p < 0.05) == pytest.approx(0.05, abs=3 * np.sqrt(0.05 * 0.95 / 400))


def test_restricted_ratio_refuses_what_the_model_absorbs():
    _made, y, g, _ = world()
    dummies = [(g == k).astype(float) for k in range(1, 12)]
    full = make.design(*dummies, groups={"g": g})
    with pytest.raises(NotSupported, match="already has a coefficient"):
        RestrictedLR().read(make.fits(full, y), LEVEL)
    with pytest.raises(NotSupported, match="already has a coefficient"):
        GroupLM().read(make.fits(full, y), LEVEL)


# ---- cluster-level ----


def test_score_variance_by_double_sums():
    rng = np.random.default_rng(0)
    s, up = rng.normal(size=(20, 2)), rng.integers(0, 5, 20)
    theta, variance, total = sums(s, up, 5)
    for b in range(2):
        cross = [s[i, b] * s[j, b] for i in range(20) for j in range(20) if i != j and up[i] == up[j]]
        assert theta[b] == pytest.approx(sum(cross))
        assert variance[b] == pytest.approx(2 * sum(c**2 for c in cross))
        assert total[b] == pytest.approx(np.sum(s[:, b] ** 2))


def nested(G=24, inside=3, each=4, B=400, coarse=0.0, seed=6):
    rng = np.random.default_rng(seed)
    fine = np.repeat(np.arange(G * inside), each)
    top = fine // inside
    x = rng.normal(size=G)[top] + 0.5 * rng.normal(size=len(fine))
    Y = 0.7 * rng.normal(size=(G * inside, B))[fine] + rng.normal(size=(len(fine), B))
    Y = Y + coarse * rng.normal(size=(G, B))[top]
    return make.design(x, groups={"o": top, "o/g": fine}), Y


def test_levels_are_compared_with_the_next_finer_one():
    made, _ = nested()
    assert [a.key for a in ClusterLevel().abouts(made)] == ["o/g over row: x1", "o over o/g: x1"]


def test_level_test_keeps_its_size_and_sees_a_coarser_level():
    about = About("o over o/g: x1", "")
    made, Y = nested()
    p = ClusterLevel().read(make.fits(made, Y), about).p
    assert np.mean(p < 0.05) < 0.05 + 3 * np.sqrt(0.05 * 0.95 / 400)  # the plug-in variance is cautious
    made, Y = nested(coarse=1.0)
    assert np.mean(ClusterLevel().read(make.fits(made, Y), about).p < 0.05) > 0.6


def test_with_few_coarse_clusters_fine_ones_are_resampled():
    about = About("o over o/g: x1", "")
    rejected = 0
    for seed in range(60):
        made, Y = nested(G=8, B=1, seed=seed)
        reading = ClusterLevel().read(make.fits(made, Y[:, 0]), about)
        assert reading.p_method.startswith("wild bootstrap")
        rejected += bool(reading.p[0] < 0.05)
    assert rejected <= 3 + 3 * np.sqrt(60 * 0.05 * 0.95)


def test_one_large_cluster_among_many_is_as_few():
    """n²/Σn_g² of one cluster of 60 rows and 40 of 2 is 140²/(60² + 40·2²) = 5.2, below 20."""
    g = np.repeat(np.arange(41), [60] + 40 * [2])
    rng = np.random.default_rng(9)
    made = make.design(rng.normal(size=140), groups={"g": g})
    one = ClusterLevel().read(make.fits(made, rng.normal(size=140)), About("g over row: x1", ""))
    assert _alike(made.group.finest) == pytest.approx(140**2 / (60**2 + 40 * 4))
    assert one.p_method.startswith("wild bootstrap")


def test_interval_of_the_level_comparison_is_that_of_two_variances_with_few_df():
    """Balanced groups and a mean of groups: G − 1 df above (the constant takes one), m below."""
    G, n = 12, 10
    rng = np.random.default_rng(3)
    g = np.repeat(np.arange(G), n)
    x = np.repeat(np.tile([-1.0, 1.0], G // 2), n)
    made = make.design(x, groups={"g": g})
    fits = make.fits(made, rng.normal(size=G)[g] + rng.normal(size=G * n))
    reading = ClusterLevel().read(fits, About("g over row: x1", ""))
    size = float(reading.estimate[0])
    # Satterthwaite df of the working model: (tr N)²/tr N², N the covariance of cluster scores after the fit.
    w = made.basis.contrast(np.eye(made.p)[1])
    M = np.eye(made.n) - made.Q @ made.Q.T
    Z = np.eye(G)[g]
    A = (Z * (made.Q @ w)[:, None]).T @ M  # scores of clusters, adjusted by one factor here
    N = A @ A.T
    df = np.trace(N) ** 2 / np.trace(N @ N)
    assert df == pytest.approx(G - 2)
    assert float(reading.low[0]) == pytest.approx(size / np.sqrt(stats.f.isf(0.025, df, made.m)), rel=1e-6)
    assert float(reading.high[0]) == pytest.approx(size / np.sqrt(stats.f.ppf(0.025, df, made.m)), rel=1e-6)


def test_interval_of_the_level_comparison_holds_the_truth():
    """Balanced groups: the variance of a mean grows by 1 + (n − 1)ρ; 300 draws at 95 %."""
    G, n = 12, 8
    rng = np.random.default_rng(4)
    g = np.repeat(np.arange(G), n)
    made = make.design(np.repeat(np.tile([-1.0, 1.0], G // 2), n), groups={"g": g})
    held = 0
    for _ in range(300):
        fits = make.fits(made, rng.normal(size=G)[g] + rng.normal(size=G * n))
        coarse, w = made.group["g"], made.basis.contrast(np.eye(made.p)[1])
        s = (made.Q @ w)[:, None] * fits.response.residual
        theta, _, fine = sums(s, coarse.codes, G)
        lower, upper = _reach(fits, coarse, None, made.focus()[0], w)
        size = float(np.sqrt(1 + theta / fine)[0])
        held += size * lower <= np.sqrt(1 + (n - 1) * 0.5) <= size * upper
    assert held / 300 > 0.88


def test_bootstrap_scores_equal_refits_row_by_row():
    made, y, g, _x = world(G=6)
    f = make.fits(made, y)
    e, Q = f.response.residual[:, 0], made.Q
    w = made.basis.contrast(np.eye(made.p)[1])
    v = np.random.default_rng(0).choice([-1.0, 1.0], len(g))
    again = made.basis.project((v * e)[:, None])[:, 0]
    slow = (Q @ w) * again
    fast = v * (Q @ w) * e - (Q * (Q @ w)[:, None]) @ ((Q * e[:, None]).T @ v)
    np.testing.assert_allclose(fast, slow, atol=1e-12)


# ---- group-endogeneity ----


def test_between_less_within_by_two_regressions():
    made, y, g, x = world(between=1.5)
    reading = GroupEndogeneity().read(make.fits(made, y), About("x1 by g", ""))
    mean = np.array([x[g == k].mean() for k in range(12)])[g]
    X = np.column_stack([np.ones(len(g)), x, (g % 2).astype(float), mean])
    beta = np.linalg.lstsq(X, y, rcond=None)[0]
    assert reading.estimate[0] == pytest.approx(beta[3], rel=1e-9)
    # CR2 of that coefficient by hand.
    A = np.linalg.inv(X.T @ X)
    e, meat = y - X @ beta, np.zeros((4, 4))
    for k in range(12):
        own = g == k
        s, U = np.linalg.eigh(np.eye(own.sum()) - X[own] @ A @ X[own].T)
        score = X[own].T @ (U @ np.diag(s**-0.5) @ U.T) @ e[own]
        meat += np.outer(score, score)
    se = np.sqrt((A @ meat @ A)[3, 3])
    assert reading.statistic[0] == pytest.approx(beta[3] / se, rel=1e-8)


def test_endogeneity_size_under_dependence_and_power():
    made, y, *_ = world(G=16, B=600, seed=4)
    p = GroupEndogeneity().read(make.fits(made, y), About("x1 by g", "")).p
    assert np.mean(p < 0.05) == pytest.approx(0.05, abs=3 * np.sqrt(0.05 * 0.95 / 600))
    made, y, *_ = world(G=16, B=100, between=1.5, seed=4)
    assert np.mean(GroupEndogeneity().read(make.fits(made, y), About("x1 by g", "")).p < 0.05) > 0.7


def several(between, B, G=40, n=5, seed=8):
    """Two predictors whose group means both move y by the same small extra."""
    rng = np.random.default_rng(seed)
    g = np.repeat(np.arange(G), n)
    mean = rng.normal(size=(2, G))
    X = mean[:, g] + rng.normal(size=(2, G * n))
    made = make.design(X[0], X[1], groups={"g": g})
    extra = between * (mean[0] + mean[1])[g][:, None]
    Y = extra + 0.7 * rng.normal(size=(G, B))[g] + rng.normal(size=(G * n, B))
    return made, Y, g, X


def test_all_group_means_are_tested_at_once():
    made, Y, *_ = several(0.0, 400)
    about = next(a for a in GroupEndogeneity().abouts(made) if a.key == "all predictors by g")
    p = GroupEndogeneity().read(make.fits(made, Y), about).p
    assert np.mean(p < 0.05) == pytest.approx(0.05, abs=3 * np.sqrt(0.05 * 0.95 / 400))
    made, Y, *_ = several(0.4, 100)
    fits = make.fits(made, Y)
    together = GroupEndogeneity().read(fits, about)
    alone = GroupEndogeneity().read(fits, About("x1 by g", ""))
    assert together.df == 2
    assert np.mean(together.p < 0.05) > np.mean(alone.p < 0.05) > 0.3
    assert "any predictor" in GroupEndogeneity().sentence(together, about)


def test_one_moving_predictor_has_no_joint_test():
    made, *_ = world()
    assert [a.key for a in GroupEndogeneity().abouts(made)] == ["x1 by g"]


def test_equal_means_cannot_be_asked():
    g = np.repeat(np.arange(8), 4)
    x = np.tile(np.arange(4.0), 8)
    evidence = gather(
        make.fits(make.design(x, groups={"g": g}), np.random.default_rng(0).normal(size=32)),
        (GroupEndogeneity(),),
    )
    assert evidence.findings[0].verdict == "not applicable"


# ---- slope-variation ----


@pytest.mark.parametrize("weights", [False, True])
def test_slopes_equal_the_comparison_of_two_regressions(weights):
    made, y, g, x = world(slope=0.5, weights=weights)
    f = make.fits(made, y)
    root = np.ones(len(g)) if made.root is None else made.root
    Z = (g[:, None] == np.arange(12)).astype(float)

    def rss(X):
        X, v = X * root[:, None], y * root
        return float(np.sum((v - X @ np.linalg.lstsq(X, v, rcond=None)[0]) ** 2)), np.linalg.matrix_rank(X)

    one, r1 = rss(np.column_stack([Z, x]))
    each, r2 = rss(np.column_stack([Z, Z * x[:, None]]))
    F = (one - each) / (r2 - r1) / (each / (len(g) - r2))
    reading = SlopeVariation().read(f, About("x1 by g", ""))
    assert (reading.df, reading.df2) == (r2 - r1, len(g) - r2)
    assert reading.statistic[0] == pytest.approx(F, rel=1e-9)
    assert reading.p[0] == pytest.approx(stats.f.sf(F, r2 - r1, len(g) - r2), rel=1e-9)


def test_slope_test_is_exact_whatever_the_intercepts_and_its_interval_covers():
    made, y, *_ = world(tau=3.0, B=2000, seed=5)
    p = SlopeVariation().read(make.fits(made, y), About("x1 by g", "")).p
    assert np.mean(p < 0.05) == pytest.approx(0.05, abs=3 * np.sqrt(0.05 * 0.95 / 2000))
    hits = 0
    made, Y, *_ = world(slope=0.6, B=200, seed=5)
    for b in range(200):
        reading = SlopeVariation().read(make.fits(made, Y[:, b]), About("x1 by g", ""))
        hits += bool(reading.low[0] <= 0.6 <= reading.high[0])
    assert hits / 200 == pytest.approx(0.95, abs=3 * np.sqrt(0.05 * 0.95 / 200) + 0.01)


def test_slopes_by_scale_shift_and_order():
    made, y, g, x = world(slope=0.5)
    part = made.group.finest
    one = spread(make.fits(made, y).response, part, "x1", x)
    moved = make.design(50 + 10 * x, (g % 2).astype(float), groups={"g": g})
    other = spread(make.fits(moved, 3 * y).response, part, "x1", 50 + 10 * x)
    assert other.F[0] == pytest.approx(one.F[0], rel=1e-8)
    assert other.sd[0] == pytest.approx(0.3 * one.sd[0], rel=1e-8)
    order = np.random.default_rng(1).permutation(len(y))
    again = make.design(x[order], (g[order] % 2).astype(float), groups={"g": g[order]})
    last = spread(make.fits(again, y[order]).response, again.group.finest, "x1", x[order])
    assert last.F[0] == pytest.approx(one.F[0], rel=1e-8)


def test_two_rows_in_every_group_leave_slopes_unknown():
    g = np.repeat(np.arange(10), 2)
    rng = np.random.default_rng(0)
    with pytest.raises(NotSupported, match="no degrees of freedom within groups"):
        SlopeVariation().read(
            make.fits(make.design(rng.normal(size=20), groups={"g": g}), rng.normal(size=20)),
            About("x1 by g", ""),
        )


def test_slopes_are_compared_where_only_the_interaction_is_in_focus():
    rng = np.random.default_rng(12)
    g, day = np.repeat(np.arange(20), 6), np.tile(np.arange(6.0), 20)
    arm = (g % 2).astype(float)
    made = make.design(day, arm, day * arm, groups={"g": g})
    x, a, _ = (t for t in made.terms if t.kind != "constant")
    both = Term("x1 × x2", (3,), "interaction", ("x1", "x2"), True)
    terms = (made.terms[0], replace(x, focus=False), replace(a, focus=False), both)
    narrow = replace(made, terms=terms)
    assert [b.key for b in SlopeVariation().abouts(narrow)] == ["x1 by g"]
    y = rng.normal(size=20)[g] * day + rng.normal(size=120)
    reading = SlopeVariation().read(make.fits(narrow, y), About("x1 by g", ""))
    wide = SlopeVariation().read(make.fits(made, y), About("x1 by g", ""))
    assert reading.statistic[0] == pytest.approx(wide.statistic[0])
    assert reading.p[0] < 1e-6


# ---- group-influence ----


def test_coefficients_without_each_group_equal_refits():
    made, y, g, x = world()
    f = make.fits(made, y)
    left = influence(made, made.group.finest).left_out(f.response)
    X = np.column_stack([np.ones(len(g)), x, (g % 2).astype(float)])
    for k in range(12):
        keep = g != k
        np.testing.assert_allclose(left[k], np.linalg.lstsq(X[keep], y[keep], rcond=None)[0], rtol=1e-8)


def test_leverage_and_shares_add_up():
    made, *_ = world()
    seen = influence(made, made.group.finest)
    assert seen.leverage.sum() == pytest.approx(made.p)
    np.testing.assert_allclose(seen.partial.sum(axis=0), 1.0)
    assert np.all(seen.effective() <= 12 + 1e-9)
    equal = make.design(np.tile(np.arange(4.0), 8), groups={"g": np.repeat(np.arange(8), 4)})
    np.testing.assert_allclose(influence(equal, equal.group.finest).effective(0.3), 8.0)


def test_what_one_group_alone_decides_is_unknown_without_it():
    g = np.repeat(np.arange(6), 4)
    rng = np.random.default_rng(0)
    made = make.design((g == 2).astype(float), rng.normal(size=24), groups={"g": g})
    left = influence(made, made.group.finest).left_out(make.fits(made, rng.normal(size=24)).response)
    assert np.isnan(left[2, 1])
    assert np.isfinite(left[2, 2])
    assert np.isfinite(left[[0, 1, 3, 4, 5]]).all()


def test_a_planted_group_is_found_and_named():
    made, y, g, _ = world(G=20, tau=0.5)
    y = y + 6 * (g == 7)
    f = make.fits(made, y)
    finding = gather(f, (GroupInfluence(),)).findings[0]
    assert finding.verdict == "present"
    assert finding.estimate > 4
    assert any("g 7" in words for words in finding.caveats)
    assert finding.curve is not None
    assert finding.curve.kind == "left-out"
    assert len(finding.curve.y) == 20
    assert "all groups" in finding.curve.lines


@pytest.mark.parametrize("tau", [0.0, 1.0])
def test_outlying_groups_are_seldom_claimed_without_any(tau):
    made, y, *_ = world(G=14, tau=tau, B=400, seed=9)
    p = GroupInfluence().read(make.fits(made, y), LEVEL).p
    assert np.mean(p < 0.05) < 0.05 + 3 * np.sqrt(0.05 * 0.95 / 400)


# ---- all of them ----


def test_sentences_are_whole_and_carry_no_verdict_words():
    for finding in found(slope=0.4, between=0.5):
        assert finding.sentence.endswith(".")
        assert finding.sentence[:1].isupper()
        for word in ("significant", "absent", "passed"):
            assert word not in finding.sentence
        for words in finding.caveats:
            assert words[:1].isupper()
            assert words.endswith(".")


def test_one_column_says_what_many_say():
    made, Y, *_ = world(B=3, slope=0.3)
    for test in (GroupLM(), RestrictedLR(), GroupEndogeneity(), SlopeVariation(), GroupInfluence()):
        about = test.abouts(made)[0]
        many = test.read(make.fits(made, Y), about)
        for b in range(3):
            one = test.read(make.fits(made, Y[:, b]), about)
            assert many.statistic[b] == pytest.approx(one.statistic[0], rel=1e-4, abs=1e-4), test.id
            assert many.p[b] == pytest.approx(one.p[0], rel=2e-2, abs=1e-4), test.id


def test_residuals_alone_leave_the_tests_that_need_no_model():
    made, y, *_ = world(known=False)
    verdicts = {f.test: f.verdict for f in gather(make.fits(made, y), TESTS)}
    assert verdicts["group-lm"] != "not applicable"
    assert all(
        verdicts[t] == "not applicable" for t in ("cluster-level", "slope-variation", "group-endogeneity")
    )


def test_no_focus_no_question_of_predictors():
    made, _y, *_ = world()
    quiet = replace(made, terms=tuple(replace(t, focus=False) for t in made.terms))
    assert SlopeVariation().abouts(quiet) == ()
    assert GroupEndogeneity().abouts(quiet) == ()
