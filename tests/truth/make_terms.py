"""Recompute ``second_order_terms.json``: the second-order term by automatic derivatives.

Run ``python tests/truth/make_terms.py``. At the leading mode the package finds, third and fourth
derivatives of the log density are taken by JAX, four levels deep, and contracted: a second route
to the number the package gets from differences of Hessians. Left out are the integrals where the
two must differ or neither is defined (walls, a kink, no peak, zero curvature), and those above 30
dimensions, whose term is known in closed form.
"""

from __future__ import annotations

import json
import warnings
from pathlib import Path

import jax
import jax.numpy as jnp
import numpy as np
from integrals import every_case

import evidence as ev

FILE = Path(__file__).parent / "second_order_terms.json"
UNDEFINED = {"hard_edge_d3", "hard_near_d3", "lasso_kink_d2", "quartic_d1", "eight_centred_d10"}
MOST = 30


def parts(log_density, mode: np.ndarray) -> tuple[float, float]:
    """Cubic and quartic part of c at a mode [d], in whitened coordinates [nats]."""
    d = len(mode)
    curvature = np.asarray(jax.jit(jax.hessian(lambda z: -log_density(z)))(mode))
    # H = L L', and the columns of inv(L)' are one-sd steps
    steps = np.linalg.inv(np.linalg.cholesky(curvature)).T

    def objective(u):
        return -log_density(mode + jnp.asarray(steps) @ u)

    def laplacian(u):
        return jnp.trace(jax.hessian(objective)(u))

    third = np.asarray(jax.jit(jax.jacfwd(jax.hessian(objective)))(np.zeros(d)))
    fourth = np.asarray(jax.jit(jax.hessian(laplacian))(np.zeros(d)))
    traces = np.einsum("iik->k", third)
    cubic = np.sum(traces**2) / 8.0 + np.sum(third**2) / 12.0
    return float(cubic), float(-np.trace(fourth) / 8.0)


def main() -> None:
    """Recompute all of them."""
    made = {}
    for name, build in every_case().items():
        case = build()
        if name in UNDEFINED or case.dimension > MOST:
            continue
        with warnings.catch_warnings():
            warnings.simplefilter("ignore", ev.EvidenceWarning)
            mode = ev.approximate(case.model(), depth="none").modes[0].z
        with jax.enable_x64(True):
            cubic, quartic = parts(case.log_density, mode)
        made[name] = {"cubic": cubic, "quartic": quartic}
        print(f"{name:24s} {cubic:+.10f} {quartic:+.10f}", flush=True)
    FILE.write_text(json.dumps(made, indent=1) + "\n")


if __name__ == "__main__":
    main()
