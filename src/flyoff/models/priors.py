"""What is known of the state at the start: Gaussian, box or mixture.

A prior is held per run: its centre (n, M) may differ from run to run. `moments` serves Gaussian
filters, `sample` particle filters, `components` mixture filters.
"""

from __future__ import annotations

from dataclasses import dataclass, replace
from typing import Protocol

import numpy as np

from flyoff.numerics import linalg
from flyoff.numerics.spaces import Array, StateSpace
from flyoff.numerics.streams import Streams

__all__ = ["BoxPrior", "GaussianPrior", "MixturePrior", "Prior"]


class Prior(Protocol):
    """The contract; every array is component first, runs last."""

    @property
    def space(self) -> StateSpace:
        """The space it lives in."""
        ...

    def moments(self) -> tuple[Array, Array]:
        """Mean (n, M) and tangent covariance (d, d, M)."""
        ...

    def sample(self, streams: Streams, role: str, count: int) -> Array:
        """Draws (n, count, M)."""
        ...

    def components(self, k: int) -> tuple[Array, Array, Array]:
        """Log weights (k, M), means (n, k, M), covariances (d, d, k, M) of a k-part mixture."""
        ...

    def runs(self, index: slice | Array) -> Prior:
        """The prior of a part of the runs."""
        ...

    def cast(self, dtype: np.dtype) -> Prior:
        """The prior in another floating-point type."""
        ...


def _part(a: Array, index: slice | Array) -> Array:
    """Some runs, runs last in memory too: reductions over another layout have other bits."""
    return np.ascontiguousarray(a[..., index])


@dataclass(frozen=True)
class GaussianPrior:
    """N(mean, cov) in the tangent space at the mean: mean (n, M), cov (d, d, M)."""

    space: StateSpace
    mean: Array
    cov: Array

    def moments(self) -> tuple[Array, Array]:
        """Mean and covariance, as given."""
        return self.mean, self.cov

    def sample(self, streams: Streams, role: str, count: int) -> Array:
        """Draws (n, count, M)."""
        low, _ = linalg.cholesky(self.cov)
        z = streams.normal(role, (self.space.d, count)).astype(self.mean.dtype, copy=False)
        return self.space.retract(self.mean[:, None], np.einsum("ikm,kjm->ijm", low, z))

    def components(self, k: int) -> tuple[Array, Array, Array]:
        """One component, whatever `k`: a Gaussian needs no splitting here."""
        even = np.zeros((1, self.mean.shape[1]), dtype=self.mean.dtype)
        return even, self.mean[:, None], self.cov[:, :, None]

    def runs(self, index: slice | Array) -> GaussianPrior:
        """The prior of a part of the runs."""
        return replace(self, mean=_part(self.mean, index), cov=_part(self.cov, index))

    def cast(self, dtype: np.dtype) -> GaussianPrior:
        """The prior in another floating-point type."""
        return replace(self, mean=self.mean.astype(dtype), cov=self.cov.astype(dtype))


@dataclass(frozen=True)
class BoxPrior:
    """Uniform on centre +- half width in tangent coordinates: centre (n, M), half (d, M)."""

    space: StateSpace
    centre: Array
    half: Array

    def moments(self) -> tuple[Array, Array]:
        """Centre, and a diagonal covariance of half^2/3."""
        d = self.space.d
        cov = np.zeros((d, d, self.centre.shape[1]), dtype=self.centre.dtype)
        for i in range(d):
            cov[i, i] = self.half[i] ** 2 / 3
        return self.centre, cov

    def sample(self, streams: Streams, role: str, count: int) -> Array:
        """Draws (n, count, M)."""
        z = streams.uniform(role, (self.space.d, count)).astype(self.centre.dtype, copy=False)
        return self.space.retract(self.centre[:, None], (2 * z - 1) * self.half[:, None])

    def components(self, k: int) -> tuple[Array, Array, Array]:
        """`k` equal cells along the widest component, each with its own moments."""
        wide = int(np.argmax(self.half.max(axis=1)))
        runs = self.centre.shape[1]
        half = self.half.copy()
        half[wide] = half[wide] / k
        cell = replace(self, half=half).moments()[1]
        delta = np.zeros((self.space.d, k, runs), dtype=self.centre.dtype)
        place = (2 * np.arange(k) + 1 - k)[:, None]
        delta[wide] = place * half[wide]
        means = self.space.retract(self.centre[:, None], delta)
        cov = np.repeat(cell[:, :, None], k, axis=2)
        return np.full((k, runs), -np.log(k), dtype=self.centre.dtype), means, cov

    def runs(self, index: slice | Array) -> BoxPrior:
        """The prior of a part of the runs."""
        return replace(self, centre=_part(self.centre, index), half=_part(self.half, index))

    def cast(self, dtype: np.dtype) -> BoxPrior:
        """The prior in another floating-point type."""
        return replace(self, centre=self.centre.astype(dtype), half=self.half.astype(dtype))


@dataclass(frozen=True)
class MixturePrior:
    """Gaussian mixture: log_weights (K, M), means (n, K, M), covs (d, d, K, M)."""

    space: StateSpace
    log_weights: Array
    means: Array
    covs: Array

    def _weights(self) -> Array:
        w = np.exp(self.log_weights - self.log_weights.max(axis=0))
        out: Array = w / w.sum(axis=0)
        return out

    def moments(self) -> tuple[Array, Array]:
        """Moments of the whole mixture, about the heaviest component."""
        w = self._weights()
        runs = w.shape[1]
        heaviest = self.means[:, np.argmax(w, axis=0), np.arange(runs)]
        mean, dev = self.space.mean(self.means, w, heaviest, passes=3)
        within = (w * self.covs).sum(axis=2)
        return mean, within + linalg.product_t(w * dev, dev)

    def sample(self, streams: Streams, role: str, count: int) -> Array:
        """Draws (n, count, M): a component by its weight, then a Gaussian draw from it."""
        edges = np.cumsum(self._weights(), axis=0)
        u = streams.uniform(role + ":component", (count,))
        which = np.minimum((u[None] > edges[:, None]).sum(axis=0), len(edges) - 1)
        runs = np.arange(u.shape[1])
        low, _ = linalg.cholesky(self.covs.reshape(*self.covs.shape[:2], -1))
        low = low.reshape(self.covs.shape)[:, :, which, runs]
        z = streams.normal(role, (self.space.d, count)).astype(self.means.dtype, copy=False)
        return self.space.retract(self.means[:, which, runs], np.einsum("ikjm,kjm->ijm", low, z))

    def components(self, k: int) -> tuple[Array, Array, Array]:
        """Its own components, whatever `k`."""
        return self.log_weights, self.means, self.covs

    def runs(self, index: slice | Array) -> MixturePrior:
        """The prior of a part of the runs."""
        return replace(
            self,
            log_weights=_part(self.log_weights, index),
            means=_part(self.means, index),
            covs=_part(self.covs, index),
        )

    def cast(self, dtype: np.dtype) -> MixturePrior:
        """The prior in another floating-point type."""
        return replace(
            self,
            log_weights=self.log_weights.astype(dtype),
            means=self.means.astype(dtype),
            covs=self.covs.astype(dtype),
        )
