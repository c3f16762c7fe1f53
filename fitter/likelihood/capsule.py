"""A likelihood as a capsule, and a capsule as a likelihood.

After the compression χ² = ‖y − R x‖² + ρ² whatever the number of supernovae. A capsule keeps R and y on K+1 Chebyshev nodes, with the
amplitudes that get a posterior of their own and a column for the magnitude; the other systematic modes are marginalised.

A fit of data refines its nodes until the interpolation error is negligible. A capsule cannot: its order is the finest level there is.
Node values are computed as exactly as needed all the same; what remains is the interpolation between the nodes. Points where that
may matter are counted, and their effect on χ² is bounded (`CapsulePosterior.accuracy`).
"""

from __future__ import annotations

from types import SimpleNamespace
from typing import TYPE_CHECKING, Any, NoReturn

import numpy as np

from fitter.array_types import BoolArray, FloatArray
from fitter.cosmology import get_model
from fitter.cosmology.distances import log_distance
from fitter.cosmology.grid import Grid
from fitter.errors import InputError
from fitter.likelihood.compression import Compressed, compress, stacked_qr
from fitter.likelihood.design import FINEST_ORDER, REFERENCE, Design
from fitter.likelihood.kernel import TAIL_TOLERANCE, Kernel, Level
from fitter.likelihood.posterior import LogPosterior
from fitter.parameters import ZERO_POINT
from fitter.sample.capsule import Amplitude, Capsule, CapsuleSample, pack

if TYPE_CHECKING:
    from fitter.cosmology.base import Model
    from fitter.likelihood.scatter import ScatterNodes
    from fitter.sample.noise import Noise
    from fitter.sample.sample import Sample

__all__ = ["DEFAULT_ORDER", "CapsulePosterior", "encapsulate"]

DEFAULT_ORDER = 48
_INTERPOLATION = 8.0  # the error of f is at most about this many times its tail
_MATTERS = 0.01  # a change of χ² that no posterior shows
_CHECKED = 4000


def encapsulate(sample: Sample, *, order: int = DEFAULT_ORDER, scatter: float = 0.0, facts: dict[str, Any] | None = None) -> Capsule:
    """Compress a sample into a capsule.

    Parameters
    ----------
    sample : Sample
    order : int
        Degree K of the nodes; K+1 numbers describe a distance-redshift relation.
    scatter : float
        Intrinsic scatter held fixed beside the sample's own terms, mag.
    facts : dict, optional
        title, citation, terms, groups, made_by, without: kept with the numbers.

    Raises
    ------
    InputError
        The intrinsic scatter is free, or the sample is a capsule already.
    """
    if not sample.has_rows:
        raise InputError("this run was a fit of a capsule already", cure="Pass that file on")
    if isinstance(sample.intrinsic_prior, dict) and not scatter:
        cure = "Hold it: `intrinsic: NUMBER` among the uncertainties, e.g. its best fit"
        problem = "with a fitted intrinsic scatter the covariance changes from point to point, and so does the compressed likelihood"
        raise InputError(problem, cure=cure)
    noise = sample.noise.plus_variance(scatter**2) if scatter else sample.noise
    kept = [i for i, name in enumerate(noise.mode_names) if name.startswith(ZERO_POINT)]
    modes = noise.modes[:, [i for i in range(noise.modes.shape[1]) if i not in kept] + kept]
    n, ones = len(sample.redshift), np.ones((len(sample.redshift), 1))
    design = Design(
        sample.redshift, sample.redshift_helio, sample.data, sample.calibrator_modulus, noise, np.zeros((n, 0)), modes, ones
    )  # fmt: skip
    coarse = Grid(design.grid.z_max, order)
    table = compress(design).project(coarse.interpolation(design.grid.u))
    first = modes.shape[1] - len(kept)
    r = np.block([[table.nuisance_r[first:, first:], table.nuisance_x[first:]], [np.zeros((len(table.r), len(kept))), table.r]])
    y = np.concatenate([table.nuisance_y[first:], table.y])
    # Fewer supernovae than nodes leave fewer rows: the triangle is filled up.
    missing = r.shape[1] - len(r)
    r, y = np.vstack([r, np.zeros((missing, r.shape[1]))]), np.append(y, np.zeros(missing))
    numbers = {
        "factor": pack(r[np.triu_indices(len(r))]),
        "y": pack(y),
        "reference": pack(_reference(coarse)),
        "rho2": float(table.rho2),
        # The pivots of what is kept count when it is marginalised.
        "log_norm": table.log_norm + float(np.log(np.abs(np.diag(table.nuisance_r[first:, first:]))).sum()),
    }
    amplitudes = tuple(Amplitude(name=noise.mode_names[i], sigma=float(np.abs(noise.modes[:, i]).max())) for i in kept)
    flow = sample.redshift[~np.asarray(sample.is_calibrator)]
    described = {
        "n": sample.n,
        "n_calibrators": sample.n_calibrators,
        "redshift_min": float((flow if len(flow) else sample.redshift).min()),
        "redshift_max": float((flow if len(flow) else sample.redshift).max()),
        "data_kind": sample.data_kind,
        "distance_scale": sample.distance_scale,
        "covariance_scale": sample.covariance_scale_prior,
        "correlated": bool(not noise.is_diagonal or noise.modes.shape[1]),
        "removed": dict(sample.removed),
        "sample_sha256": sample.sha256,
        "order": order,
        "u_max": coarse.u_max,
        "amplitudes": amplitudes,
    }
    capsule = Capsule.model_validate({**described, **(facts or {}), **numbers, "checksum": "", "schema": "mufitter capsule 1"})
    return capsule.model_copy(update={"checksum": capsule.digest()})


def _reference(grid: Grid) -> FloatArray:
    """f of the reference model at the nodes of a grid, through the finest grid."""
    finest = Grid(grid.z_max, FINEST_ORDER)
    values = log_distance(get_model("flat_lcdm"), REFERENCE, finest)[0][0]
    return finest.interpolation(grid.u) @ values


def _compressed(capsule: Capsule, design: Design) -> Compressed:
    """Eliminate what this fit marginalises: the amplitudes, and the magnitude where its prior is flat or Gaussian."""
    r, y, _ = capsule.arrays()
    kept, last = len(capsule.amplitudes), len(r) - 1
    n_gaussian, n_flat = design.gaussian.shape[1] - kept, design.flat.shape[1]
    magnitude = r[:, last:]
    columns = [r[:, :kept], *[magnitude * g for g in design.gaussian[0, kept:]], *[magnitude] * n_flat, r[:, kept:last]]
    columns += [magnitude] * design.linear.shape[1] + [(y - magnitude[:, 0] * design.shift)[:, None]]
    block = np.hstack(columns)
    priors = np.zeros((n_gaussian, block.shape[1]))
    priors[:, kept : kept + n_gaussian] = np.eye(n_gaussian)
    factor = stacked_qr([np.vstack([priors, block])])
    m = kept + n_gaussian + n_flat
    q = block.shape[1] - 1 - m
    factor = np.vstack([factor, np.zeros((max(0, m + q - len(factor)), block.shape[1]))])
    pivots = np.log(np.abs(np.diag(factor[:m, :m]))).sum()
    log_norm = capsule.log_norm - pivots + 0.5 * n_flat * np.log(2 * np.pi)
    leftover = factor[m + q :, -1]
    return Compressed(
        factor[m : m + q, m : m + q].copy(), factor[m : m + q, -1].copy(), capsule.rho2 + float(leftover @ leftover), float(log_norm),
        factor[:m, :m].copy(), factor[:m, m : m + q].copy(), factor[:m, -1].copy(),
    )  # fmt: skip


class CapsuleKernel(Kernel):
    """χ² and its normalisation from a capsule: one level, with what lies beyond it counted."""

    def __init__(self, design: Design, model: Model, capsule: Capsule) -> None:
        self.design, self.model, self.scatter, self.capsule = design, model, None, capsule
        table = _compressed(capsule, design)
        grid = Grid(float(np.expm1(capsule.u_max)), capsule.order)
        reference = capsule.arrays()[2]
        norm = float(np.linalg.norm(table.r))
        self.levels = (Level(grid, reference, table.r, table.y, np.array([table.rho2]), norm, (table,)),)
        self.log_norms = np.array([table.log_norm])
        self.counts = {"evaluations": 0, "refined": 0, "direct": 0, "excluded": 0}
        self._finest = Grid(grid.z_max, FINEST_ORDER)
        self._to_nodes = self._finest.interpolation(grid.u)

    def shape(self, theta: FloatArray, omega_r: FloatArray) -> tuple[FloatArray, FloatArray, BoolArray]:
        """f at the nodes, its tail there, and whether the model exists: (W, K+1), (W,), (W,)."""
        grid = self.levels[0].grid
        f, tail, inside = log_distance(self.model, theta, grid, omega_r)
        rough = inside & (tail > TAIL_TOLERANCE)
        if rough.any():
            fine, fine_tail, exists = log_distance(self.model, theta[rough], self._finest, omega_r[rough])
            f[rough] = fine @ self._to_nodes.T
            inside[rough] = exists & np.isfinite(fine_tail) & np.isfinite(f[rough]).all(axis=1)
            tail[rough] = np.where(np.isfinite(tail[rough]), tail[rough], fine_tail)
            self.counts["refined"] += int(rough.sum())
        return f, tail, inside

    def __call__(
        self, theta: FloatArray, omega_r: FloatArray, offset: FloatArray, linear: FloatArray, sigma: FloatArray | None = None
    ) -> tuple[FloatArray, float | FloatArray]:
        """Evaluate W points; arguments and values as for `Kernel`."""
        f, _, inside = self.shape(theta, omega_r)
        chi2 = np.full(len(theta), np.inf)
        level = self.levels[0]
        chi2[inside] = level.chi2(level.point(f[inside], offset[inside], linear[inside]))[:, 0]
        self.counts["evaluations"] += len(theta)
        self.counts["excluded"] += int((~inside).sum())
        return chi2, self.log_norms[0]

    def nuisance(
        self,
        theta: FloatArray,
        omega_r: FloatArray,
        offset: FloatArray,
        linear: FloatArray,
        sigma: FloatArray | None = None,
        noise: FloatArray | None = None,
    ) -> FloatArray:
        """Nuisance amplitudes given the rest, (W, m); as for `Kernel`."""
        from scipy.linalg import solve_triangular

        level = self.levels[0]
        c = level.nodes[0]
        f, _, _ = self.shape(theta, omega_r)
        rhs = c.nuisance_y - level.point(f, offset, linear) @ c.nuisance_x.T
        return solve_triangular(c.nuisance_r, (rhs if noise is None else rhs + noise).T).T

    def with_data(self, data: Any) -> NoReturn:
        """Refuse: there are no rows to put other data in."""
        raise _no_rows()


class CapsulePosterior(LogPosterior):
    """The posterior given a capsule; everything that needs no single supernova."""

    sample: CapsuleSample
    kernel: CapsuleKernel

    def _make_design(self, noise: Noise, flat: FloatArray, gaussian: FloatArray, linear: FloatArray, shift: float) -> Any:
        return SimpleNamespace(
            noise=noise, flat=flat, gaussian=gaussian, linear=linear, shift=shift, n_nuisance=gaussian.shape[1] + flat.shape[1]
        )

    def _make_kernel(self, scatter: ScatterNodes | None) -> CapsuleKernel:
        return CapsuleKernel(self.design, self.model, self.sample.capsule)

    def accuracy(self, chain: FloatArray) -> dict[str, Any]:
        """How far the nodes suffice in a posterior.

        Parameters
        ----------
        chain : (..., n) array
            Draws.

        Returns
        -------
        dict
            order; draws (looked at); beyond, the share whose χ² may be off by more than 0.01; worst, the largest bound on that error.
            The bound |Δχ²| ≤ 2 √χ² ‖R‖ |Δf| is a pessimist's.
        """
        flat = np.asarray(chain).reshape(-1, len(self.names))
        theta = flat[np.linspace(0, len(flat) - 1, min(_CHECKED, len(flat))).astype(int)]
        ingredients = self._ingredients(theta)
        _, tail, inside = self.kernel.shape(ingredients[0], ingredients[1])
        chi2 = self.chi2(theta)
        good = inside & np.isfinite(chi2)
        error = 2 * np.sqrt(np.maximum(chi2[good], 1.0)) * self.kernel.levels[0].norm * _INTERPOLATION * tail[good]
        worst = float(error.max(initial=0.0))
        return {"order": self.sample.capsule.order, "draws": len(theta), "beyond": float(np.mean(error > _MATTERS)), "worst": worst}

    def residuals(self, theta: FloatArray) -> NoReturn:
        """Refuse: there are no rows."""
        raise InputError("a capsule has no single supernovae, and so no residuals", cure="This needs the original data")

    def with_data(self, data: Any) -> NoReturn:
        """Refuse: there are no rows."""
        raise _no_rows()

    def expected(self, theta: FloatArray) -> NoReturn:
        """Refuse: there are no rows."""
        raise _no_rows()

    def simulate(self, theta: FloatArray, rng: np.random.Generator) -> NoReturn:
        """Refuse: there are no rows."""
        raise _no_rows()


def _no_rows() -> InputError:
    return InputError("a capsule has no rows, so mock data cannot be put in their place", cure="This needs the original data")
