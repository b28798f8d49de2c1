"""Choosing the damping: the corner of the L-curve, or the height error that goes with a fixed spread."""

from dataclasses import dataclass

import numpy as np
from scipy import optimize

from fluvinv.errors import NumericalError
from fluvinv.inversion.solve import Spectrum

#: A corner is sharper than this: 0.47 on the demo, 0.1 on a sheet of cut rivers; a rate that never changed has none.
CLEAR_BEND = 0.2


@dataclass(frozen=True, slots=True)
class Damping:
    """A chosen damping.

    Attributes
    ----------
    weight : float, yr
        lambda = height_sd / spread.
    height_sd : float, m
        Standard deviation of the white height error.
    spread : float, m/yr
        Standard deviation of the prior's field that the weight stands for.
    field_spread : float, m/yr
        Standard deviation of the field for which errors are stated: `spread` where that was given, and where
        only the weight was chosen, what the fitted departure from the background implies (never less).
    """

    weight: float
    height_sd: float
    spread: float
    field_spread: float


@dataclass(frozen=True, slots=True)
class LCurve:
    """The trade-off between misfit and roughness.

    Attributes
    ----------
    weights : (n,) float array, yr
        Ascending.
    misfit_norm : (n,) float array, m
    rough_norm : (n,) float array, m/yr
    curvature : (n,) float array
    corner : float, yr
        Weight at the corner.
    clear : bool
        Whether the greatest curvature lies inside the curve and is a bend worth the name.
    """

    weights: np.ndarray
    misfit_norm: np.ndarray
    rough_norm: np.ndarray
    curvature: np.ndarray
    corner: float
    clear: bool


def curvature(spectrum: Spectrum, weight: float) -> float:
    r"""Curvature of the L-curve (log misfit norm, log roughness norm) at a weight, in closed form.

    With rho and eta the squared norms and eta' the derivative of eta by lambda (Hansen 1992; Hansen &
    O'Leary 1993),

    .. math:: \kappa = -2 \frac{\eta\rho}{\eta'} \,
        \frac{\lambda^2 \eta' \rho + 2 \lambda \eta \rho + \lambda^4 \eta \eta'}
             {(\lambda^4 \eta^2 + \rho^2)^{3/2}} .

    (It is often printed with lambda^2 in the denominator, which cannot be: the units do not agree.)
    """
    rho = spectrum.misfit(weight)
    eta = spectrum.roughness(weight)
    slope = -4.0 * weight * float(np.sum(spectrum.loads**2 / (spectrum.values + weight**2) ** 3))
    bend = weight**2 * slope * rho + 2 * weight * eta * rho + weight**4 * eta * slope
    return -2 * eta * rho / slope * bend / (weight**4 * eta**2 + rho**2) ** 1.5


def l_curve(spectrum: Spectrum, n_weights: int = 80) -> LCurve:
    """Trace the L-curve between two ends and find its corner, the point of greatest curvature.

    The ends are where the heights determine 4 numbers and where they determine a tenth as many as there are
    heights (at least 12, at most a third of the heights). Drainage that moved leaves a misfit without a noise
    floor, so the corner is blunt; on ten grown landscapes it came within 0.02 in skill of the best weight on
    gentle ones, and 0.03 to 0.17 below it, with too little damping, where divides had moved far.

    Parameters
    ----------
    spectrum : Spectrum
    n_weights : int

    Returns
    -------
    LCurve

    Raises
    ------
    NumericalError
        If the heights carry nothing beyond the background rate, or are fitted without misfit.
    """
    if spectrum.values.size == 0 or spectrum.values[0] <= 0 or spectrum.y_squared <= 0:
        raise NumericalError("the heights carry nothing beyond one constant rate: no L-curve can be drawn")
    low, high = sorted(_ends(spectrum))
    weights = np.geomspace(low, high, n_weights)
    misfit = np.sqrt([spectrum.misfit(w) for w in weights])
    if misfit[0] <= 1e-9 * np.sqrt(spectrum.y_squared):
        raise NumericalError("the heights are fitted without any misfit, so there is no L-curve; use choose: fixed")
    rough = np.sqrt([spectrum.roughness(w) for w in weights])
    bends = np.array([curvature(spectrum, w) for w in weights])
    best = int(np.argmax(bends))
    around = np.log(weights[max(best - 1, 0)]), np.log(weights[min(best + 1, n_weights - 1)])
    found = optimize.minimize_scalar(lambda log: -curvature(spectrum, np.exp(log)), bounds=around, method="bounded")
    if not found.success or not np.isfinite(found.fun):
        raise NumericalError(f"the corner of the L-curve was not found: {found.message}")
    clear = 0 < best < n_weights - 1 and bends[best] > CLEAR_BEND
    return LCurve(weights, misfit, rough, bends, corner=float(np.exp(found.x)), clear=clear)


def _ends(spectrum: Spectrum) -> tuple[float, float]:
    """Weights at which few and many numbers are determined; the count falls as the weight grows."""
    n_rows = spectrum.n_rows
    floor, ceiling = 1e-6 * np.sqrt(spectrum.values[0]), 1e3 * np.sqrt(spectrum.values.sum())
    most = spectrum.effective_parameters(floor)
    few = min(4.0, 1 + 0.5 * (most - 1))
    many = max(min(max(n_rows / 10, 12.0), n_rows / 3, 1 + 0.98 * (most - 1)), few + 0.25 * (most - few))

    def weight_for(count):
        def excess(log):
            return spectrum.effective_parameters(np.exp(log)) - count

        return float(np.exp(optimize.brentq(excess, np.log(floor), np.log(ceiling), xtol=1e-6)))

    return weight_for(few), weight_for(many)


def damping_at_corner(spectrum: Spectrum, curve: LCurve, height_sd: float | None) -> Damping:
    """Damping at the corner of the L-curve; the height error from the misfit when it is not given.

    The estimate is misfit / (n_rows - effective parameters), whose expectation is the variance when the
    misfit is white.
    """
    if height_sd is None:
        freedom = spectrum.n_rows - spectrum.effective_parameters(curve.corner)
        height_sd = float(np.sqrt(spectrum.misfit(curve.corner) / freedom))
    spread = height_sd / curve.corner
    return Damping(curve.corner, height_sd, spread, max(spread, implied_spread(spectrum, curve.corner, height_sd)))


def implied_spread(spectrum: Spectrum, weight: float, height_sd: float) -> float:
    r"""Spread of the field (m/yr) that explains how far the damped estimate departs from the background.

    With filter factors f the expected norm is E|w|^2 = sum f^2 (spread^2 + height_sd^2 / d): the corner of an
    L-curve chooses a weight, not a spread, and the spread that goes with the weight may be far too small for
    the rates that come out (a moment estimate).
    """
    factors = spectrum.filter(weight)
    noise = height_sd**2 * float(np.sum(spectrum.values / (spectrum.values + weight**2) ** 2))
    return float(np.sqrt(max(spectrum.roughness(weight) - noise, 0.0) / np.sum(factors**2)))


def fixed_damping(spectrum: Spectrum, spread: float, height_sd: float | None) -> Damping:
    """Damping for a given spread (m/yr); the height error by evidence when it is not given.

    Raises
    ------
    NumericalError
        If the evidence has no maximum between 1e-6 and 1e6 times the spread of the heights.
    """
    if height_sd is None:
        scale = np.sqrt(spectrum.y_squared / spectrum.n_rows)
        if scale == 0:
            raise NumericalError("the heights carry nothing beyond one constant rate: no height error can be estimated")

        def cost(log):
            return -spectrum.log_evidence(10**log * scale / spread, 10**log * scale)

        found = optimize.minimize_scalar(cost, bounds=(-6, 1), method="bounded")
        if not found.success or not np.isfinite(found.fun):
            raise NumericalError(f"the height error could not be estimated: {found.message}")
        height_sd = float(10**found.x * scale)
    return Damping(height_sd / spread, height_sd, spread, spread)
