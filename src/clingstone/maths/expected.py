"""Expected REML information and Kenward and Roger's ingredients, at many values of the parameters at once.

V is linear in its parameters: σ² and the variances and covariances of what varies between cells (Kenward &
Roger 1997). Everything follows from what the cells add up to; no array runs over the rows.
"""

from __future__ import annotations

import numpy as np

from clingstone.maths.groups import Expected
from clingstone.maths.once import Array

BLOCK = 2_000_000  # doubles in the largest array when many columns of y are read together


def intercepts(n: int, c: Array, count: Array, products: Array, sigma2: Array, tau2: Array) -> Expected:
    """As ``groups.expected_information`` at K values of the parameters, from cells put together by size.

    c (D,) sizes, count (D,), products (D, p, p) Σ t_g t_g' of each; sigma2, tau2 (K,). information
    (K, 2, 2), Phi (K, p, p), P (2, K, p, p), Q (2, 2, K, p, p). O(Dp²) for each.
    """
    p, K = products.shape[1], len(sigma2)
    u = sigma2[:, None] + tau2[:, None] * c  # (K, D)
    flat = products.reshape(len(c), p * p)

    def S(w: Array) -> Array:
        return np.asarray((w @ flat).reshape(*w.shape[:-1], p, p))

    within = np.eye(p) - S(1 / c)
    s = sigma2[:, None, None]
    Phi: Array = np.asarray(np.linalg.inv(within / s + S(1 / (c * u))), dtype=float)
    P = np.stack([-(within / s**2 + S(1 / (c * u**2))), -S(u**-2.0)])
    Q = np.empty((2, 2, K, p, p))
    Q[0, 0] = within / s**3 + S(1 / (c * u**3))
    Q[0, 1] = Q[1, 0] = S(u**-3.0)
    Q[1, 1] = S(c / u**3)
    t = np.empty((2, 2, K))
    t[0, 0] = (n - count.sum()) / sigma2**2 + u**-2.0 @ count
    t[0, 1] = t[1, 0] = (c / u**2) @ count
    t[1, 1] = (c**2 / u**2) @ count
    PPhi = P @ Phi
    info = np.empty((K, 2, 2))
    for i in range(2):
        for j in range(2):
            first = np.einsum("kab,kba->k", Phi, Q[i, j])
            info[:, i, j] = (t[i, j] - 2 * first + np.einsum("kab,kba->k", PPhi[i], PPhi[j])) / 2
    return Expected(info, Phi, P, Q)


def block(n: int, C: Array, H: Array, sigma2: float, gamma: Array, E: Array) -> Expected:
    """Expected REML information and Kenward & Roger's ingredients of V = σ²I + Σ_g Z_gΓZ_g'.

    Parameters are (σ², γ₁ … γ_d) with Γ = Σ γ_kE_k, so V is linear in them. C (G, q, q) = Z_g'Z_g,
    H (G, q, p) = Z_g'Q, gamma (q, q) on the scale of y, E (d, q, q). A whole table is one cell (G = 1)
    when Z holds all its intercepts. With R_g = (σ²I + ΓC_g)⁻¹, V⁻¹Z_g = Z_gR_g, and everything follows
    from C, H and R; O(G q²p²), no array over the rows.
    """
    found = blocks(n, C, H, np.array([sigma2]), gamma[None], E)
    return Expected(found.information[0], found.Phi[0], found.P[:, 0], found.Q[:, :, 0])


def blocks(n: int, C: Array, H: Array, sigma2: Array, gamma: Array, E: Array) -> Expected:
    """As :func:`block` at K values of the parameters at once: sigma2 (K,), gamma (K, q, q).

    information (K, 1 + d, 1 + d), Phi (K, p, p), P (1 + d, K, p, p), Q (1 + d, 1 + d, K, p, p).
    """
    G, q, p = H.shape
    size = max(1, BLOCK // (G * q * max(q, p)))
    parts = [
        _blocks(n, C, H, sigma2[i : i + size], gamma[i : i + size], E) for i in range(0, len(sigma2), size)
    ]
    if len(parts) == 1:
        return parts[0]
    return Expected(
        np.concatenate([one.information for one in parts]),
        np.concatenate([one.Phi for one in parts]),
        np.concatenate([one.P for one in parts], axis=1),
        np.concatenate([one.Q for one in parts], axis=2),
    )


def _blocks(n: int, C: Array, H: Array, sigma2: Array, gamma: Array, E: Array) -> Expected:
    _, q, p = H.shape
    d, K = len(E), len(sigma2)
    s = sigma2[:, None, None, None]
    gamma = gamma[:, None]
    R = np.linalg.inv(s * np.eye(q) + gamma @ C)  # (K, G, q, q)
    F = R @ gamma
    Rt = np.swapaxes(R, -1, -2)
    B = Rt @ H  # Z'V⁻¹Q
    B2 = Rt @ B  # Z'V⁻²Q
    A = C @ R  # Z'V⁻¹Z
    A2 = Rt @ A  # Z'V⁻²Z

    def over(left: Array, right: Array) -> Array:
        """(K, p, p) Σ_g left'right."""
        left, right = np.broadcast_to(left, (K, *left.shape[-3:])), right.reshape(K, -1, p)
        return np.asarray(np.swapaxes(left.reshape(K, -1, p), 1, 2) @ right)

    s = sigma2[:, None, None]
    one = (np.eye(p) - over(H, F @ H)) / s
    two = (one - over(H, F @ B)) / s
    three = (two - over(H, F @ B2)) / s
    Phi = np.asarray(np.linalg.inv(one), dtype=float)
    EB, EA = [e @ B for e in E], [e @ A for e in E]
    P = np.stack([-two, *(-over(B, eb) for eb in EB)])
    Q = np.empty((1 + d, 1 + d, K, p, p))
    t = np.empty((1 + d, 1 + d, K))
    Q[0, 0] = three
    FC = F @ C
    t[0, 0] = (n - 2 * np.einsum("kgii->k", FC) + _both(FC, FC)) / sigma2**2
    for i in range(d):
        Q[0, i + 1] = over(B2, EB[i])
        Q[i + 1, 0] = np.swapaxes(Q[0, i + 1], 1, 2)
        t[0, i + 1] = t[i + 1, 0] = np.einsum("kgij,ji->k", A2, E[i])
        for j in range(d):
            Q[i + 1, j + 1] = over(EB[i], A @ EB[j])
            t[i + 1, j + 1] = _both(EA[i], EA[j])
    PPhi = P @ Phi
    info = np.empty((K, 1 + d, 1 + d))
    for i in range(1 + d):
        for j in range(1 + d):
            first = np.einsum("kab,kba->k", Phi, Q[i, j])
            info[:, i, j] = (t[i, j] - 2 * first + np.einsum("kab,kba->k", PPhi[i], PPhi[j])) / 2
    return Expected(info, Phi, P, Q)


def _both(left: Array, right: Array) -> Array:
    """(K,) Σ_g tr(left right)."""
    return np.asarray(np.einsum("kgij,kgji->k", left, right))
