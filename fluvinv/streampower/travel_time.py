"""Travel time and chi: integrals along the river from base level up."""

import numpy as np

from fluvinv.network import RiverNetwork
from fluvinv.streampower import _kernels


def _integrate(network: RiverNetwork, per_length: np.ndarray) -> np.ndarray:
    """Integrate a quantity that is constant on each edge from the base point to every node."""
    total = np.empty(network.n_nodes)
    _kernels.sum_upstream(network.receiver, network.edge_length * per_length, total)
    return total


def travel_time(network: RiverNetwork, erodibility: float, area_exponent: float) -> np.ndarray:
    r"""Time a signal takes from base level to each node, for slope exponent n = 1.

    .. math:: \tau(x) = \int_0^x \frac{ds}{K A(s)^m}

    The celerity K A^m is that of a kinematic wave (Rosenbloom & Anderson 1994; Whipple & Tucker 1999). It
    is constant along an edge and uses the area of the edge's upstream node, never a mean across a
    confluence; tau is therefore linear along an edge.

    Parameters
    ----------
    network : RiverNetwork
    erodibility : float
        K in m^(1-2m)/yr.
    area_exponent : float
        m.

    Returns
    -------
    (n_nodes,) float array, yr

    Notes
    -----
    Lengths of eight-direction flow paths are about 5 % long (Kulpa 1977), and K inherits that.
    """
    return _integrate(network, 1.0 / (erodibility * network.area**area_exponent))


def chi(network: RiverNetwork, concavity: float, reference_area: float = 1.0) -> np.ndarray:
    r"""Horizontal coordinate in which steady profiles are straight (Perron & Royden 2013).

    .. math:: \chi(x) = \int_0^x (A_0 / A(s))^{m/n} ds

    Parameters
    ----------
    network : RiverNetwork
    concavity : float
        m/n.
    reference_area : float, m2
        A0; with A0 = 1 m2 the slope of height against chi is the normalised channel steepness.

    Returns
    -------
    (n_nodes,) float array, m
    """
    return _integrate(network, (reference_area / network.area) ** concavity)
