"""Channels and Chebyshev nodes: the frequency axis of the engine and of every product.

A channel is the mean over its width, not the value at its centre. A function known at
Chebyshev nodes in ln f reaches its channel means through one matrix.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from sims.config import Channels

MEAN_POINTS = 4


@dataclass(frozen=True)
class ChannelGrid:
    """Contiguous channels of equal width.

    Attributes
    ----------
    edges_mhz : ndarray[channel + 1]
        Channel edges, MHz, rising.
    masked : ndarray[channel] of bool
        Channels that a mask touches.
    """

    edges_mhz: NDArray[np.float64]
    masked: NDArray[np.bool_]

    @property
    def centre_mhz(self) -> NDArray[np.float64]:
        """Channel centres, MHz."""
        return 0.5 * (self.edges_mhz[1:] + self.edges_mhz[:-1])

    @property
    def width_mhz(self) -> NDArray[np.float64]:
        """Channel widths, MHz."""
        return np.diff(self.edges_mhz)

    @property
    def count(self) -> int:
        """Number of channels."""
        return len(self.edges_mhz) - 1


def channel_grid(settings: Channels) -> ChannelGrid:
    """Channels as configured; one is masked when any part of it lies in a mask."""
    edges = np.linspace(settings.start_mhz, settings.stop_mhz, settings.count + 1)
    masked = np.zeros(settings.count, dtype=bool)
    for lower, upper in settings.masks_mhz:
        masked |= (edges[1:] > lower) & (edges[:-1] < upper)
    return ChannelGrid(edges, masked)


def mean_points(
    edges_mhz: NDArray[np.float64], points: int = MEAN_POINTS
) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """Gauss-Legendre points and weights of the mean over each channel.

    Parameters
    ----------
    edges_mhz : ndarray[channel + 1]
        Channel edges, MHz.
    points : int
        Points a channel; four are exact for cubics and more than enough for smooth spectra.

    Returns
    -------
    frequency_mhz : ndarray[channel, point]
        Frequencies, MHz.
    weight : ndarray[point]
        Weights, their sum one.
    """
    x, weight = np.polynomial.legendre.leggauss(points)
    centre, half = 0.5 * (edges_mhz[1:] + edges_mhz[:-1]), 0.5 * np.diff(edges_mhz)
    return centre[:, None] + half[:, None] * x, weight / 2.0


def chebyshev_nodes_mhz(start_mhz: float, stop_mhz: float, count: int) -> NDArray[np.float64]:
    """Chebyshev points of the first kind in ln f, MHz, rising."""
    x = -np.cos(np.pi * (np.arange(count) + 0.5) / count)
    middle, half = 0.5 * np.log(start_mhz * stop_mhz), 0.5 * np.log(stop_mhz / start_mhz)
    return np.asarray(np.exp(middle + half * x))


def expansion_matrix(
    start_mhz: float, stop_mhz: float, count: int, frequency_mhz: NDArray[np.float64]
) -> NDArray[np.float64]:
    """Matrix from values at the nodes to values of their interpolating polynomial.

    Parameters
    ----------
    start_mhz, stop_mhz : float
        Band, MHz.
    count : int
        Number of nodes.
    frequency_mhz : ndarray[...]
        Where to evaluate, MHz.

    Returns
    -------
    ndarray[..., node]
        From the discrete orthogonality of Chebyshev polynomials at these points
        (Mason and Handscomb 2003, Chebyshev Polynomials, sec. 4.6).
    """
    theta = np.pi * (np.arange(count) + 0.5) / count
    degree = np.arange(count)
    at_nodes = np.cos(np.outer(np.pi - theta, degree))
    middle, half = 0.5 * np.log(start_mhz * stop_mhz), 0.5 * np.log(stop_mhz / start_mhz)
    x = np.clip((np.log(frequency_mhz) - middle) / half, -1.0, 1.0)
    at_points = np.cos(np.arccos(x)[..., None] * degree)
    scale = np.where(degree == 0, 1.0, 2.0) / count
    return np.asarray((at_points * scale) @ at_nodes.T)


def mean_expansion_matrix(grid: ChannelGrid, count: int) -> NDArray[np.float64]:
    """Matrix ndarray[channel, node] from values at the nodes to means over the channels."""
    frequency, weight = mean_points(grid.edges_mhz)
    start, stop = grid.edges_mhz[0], grid.edges_mhz[-1]
    return np.asarray(np.einsum("cpn,p->cn", expansion_matrix(start, stop, count, frequency), weight))
