"""Choosing the damping: the corner of the L-curve, or the height error that goes with a fixed spread."""

from dataclasses import dataclass

import numpy as np
from scipy import optimize

from fluvinv.errors import NumericalError
from fluvinv.inversion.solve import Spectrum


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
        Standard deviation of the prior's field.
    """

    weight: float
    height_sd: float
    spread: float


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
    """

    weights: np.ndarray
    misfit_norm: np.ndarray
    rough_norm: np.ndarray
    curvature: np.ndarray
    corner: float


def curvature(spectrum: Spectrum, weight: float) -> float:
    r"""Curvature of the L-curve (log misfit norm, log roughness norm) at a weight, in closed form.

    With rho and eta the squared norms and eta' the derivative of eta by lambda (Hansen 1992; Hansen &
    O'Leary 1993),

    .. math:: \kappa = 2 \frac{\eta\rho}{\eta'} \,
        \frac{\lambda^2 \eta' \rho + 2 \lambda \eta \rho + \lambda^4 \eta \eta'}
             {(\lambda^4 \eta^2 + \rho^2)^{3/2}} .

    (It is often printed with lambda^2 in the denominator, which cannot be: the units do not agree.)
    """
    rho = spectrum.misfit(weight)
    eta = spectrum.roughness(weight)
    slope = -4.0 * weight * float(np.sum(spectrum.loads**2 / (spectrum.values + weight**2) ** 3))
    bend = weight**2 * slope * rho + 2 * weight * eta * rho + weight**4 * eta * slope
    return 2 * eta * rho / slope * bend / (weight**4 * eta**2 + rho**2) ** 1.5


def l_curve(spectrum: Spectrum, n_weights: int = 60) -> LCurve:
    """Trace the L-curve and find its corner, the point of greatest curvature.

    Weights run from where the fit spends a third of the heights on parameters (or the spectrum's floor) to
    where only the background is left.

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
        If the heights carry nothing beyond the background rate.
    """
    if spectrum.values.size == 0 or spectrum.values[0] <= 0 or spectrum.y_squared <= 0:
        raise NumericalError("the heights carry nothing beyond one constant rate: no L-curve can be drawn")
    log_high = 0.5 * np.log10(spectrum.values[0])
    log_low = _lowest_weight(spectrum, log_high)
    logs = np.linspace(log_low, log_high, n_weights)
    bends = np.array([curvature(spectrum, 10**log) for log in logs])
    best = int(np.argmax(bends))
    low, high = logs[max(best - 1, 0)], logs[min(best + 1, n_weights - 1)]
    found = optimize.minimize_scalar(lambda log: -curvature(spectrum, 10**log), bounds=(low, high), method="bounded")
    if not found.success or not np.isfinite(found.fun):
        raise NumericalError(f"the corner of the L-curve was not found: {found.message}")
    weights = 10**logs
    return LCurve(
        weights=weights,
        misfit_norm=np.sqrt([spectrum.misfit(w) for w in weights]),
        rough_norm=np.sqrt([spectrum.roughness(w) for w in weights]),
        curvature=bends,
        corner=float(10**found.x),
    )


def _lowest_weight(spectrum: Spectrum, log_high: float) -> float:
    """Log10 of the weight at which a third of the heights would be spent, at most 6 decades down."""
    budget = max(2.0, spectrum.n_rows / 3)
    log = log_high
    floor = max(log_high - 6, 0.5 * np.log10(max(spectrum.values[-1], 1e-12 * spectrum.values[0])))
    while log > floor and spectrum.effective_parameters(10**log) < budget:
        log -= 0.05
    return log


def damping_at_corner(spectrum: Spectrum, curve: LCurve, height_sd: float | None) -> Damping:
    """Damping at the corner of the L-curve; the height error from the misfit when it is not given.

    The estimate is misfit / (n_rows - effective parameters), whose expectation is the variance when the
    misfit is white.
    """
    if height_sd is None:
        freedom = spectrum.n_rows - spectrum.effective_parameters(curve.corner)
        height_sd = float(np.sqrt(spectrum.misfit(curve.corner) / freedom))
    return Damping(curve.corner, height_sd, height_sd / curve.corner)


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
    return Damping(height_sd / spread, height_sd, spread)
