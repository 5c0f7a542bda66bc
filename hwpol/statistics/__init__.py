"""Statistics of linear polarisation: functions of (q, u, covariance), whatever made them."""

from hwpol.statistics.angles import theta_error, theta_interval, unwrap_theta
from hwpol.statistics.combination import Combined, Variability, adopt, combine, variability
from hwpol.statistics.debias import METHODS, debias
from hwpol.statistics.intervals import KINDS, interval, upper_limit
from hwpol.statistics.moments import ellipse, null_p_value, p_and_error

__all__ = [
    "KINDS",
    "METHODS",
    "Combined",
    "Variability",
    "adopt",
    "combine",
    "debias",
    "ellipse",
    "interval",
    "null_p_value",
    "p_and_error",
    "theta_error",
    "theta_interval",
    "unwrap_theta",
    "upper_limit",
    "variability",
]
