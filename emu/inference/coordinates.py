"""Straight coordinates for samplers: the posterior of one flare in charts centred on its draws."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from emu.families.density import Array
from emu.families.parameters import Parameter
from emu.families.prior import Prior
from emu.families.priors import SinUniform, Uniform
from emu.inference.axis_chart import AxisChart, field_axis
from emu.inference.charts import Chart, CircleChart, FrequencyChart, GaussChart

__all__ = ["SamplingCoordinates", "straight_about"]


@dataclass(frozen=True)
class SamplingCoordinates:
    """Map all P parameters to P straight coordinates and back.

    Args:
        prior: the joint prior.
        charts: which together hold every column once; later ones may use the columns of earlier ones.
    """

    prior: Prior
    charts: tuple[Chart, ...]

    def to_straight(self, theta: Array) -> Array:
        """Map theta (N, P) to y (N, P)."""
        y = np.empty_like(theta)
        for chart in self.charts:
            y[:, list(chart.columns)] = chart.coordinates(theta)
        return y

    def from_straight(self, y: Array) -> tuple[Array, Array]:
        """Map y (N, P) back.

        Returns:
            theta (N, P), and the log density (N,) of the prior's box per unit of y. It is minus infinity
            where y lies outside; theta is then not meant to be used. Validity is not looked at.
        """
        theta = np.empty_like(y)
        for chart in self.charts:
            theta[:, list(chart.columns)] = chart.values(y[:, list(chart.columns)], theta)
        log_prior = np.zeros(len(y))
        for chart in self.charts:
            log_prior += chart.log_prior(y[:, list(chart.columns)], theta)
        return theta, log_prior


def straight_about(prior: Prior, theta: Array) -> SamplingCoordinates:
    """Choose charts for the parameters of a prior, centred on draws of the posterior.

    A rate with radius and spin becomes a frequency, an isotropic field axis a disc, an angle over a whole
    turn a distance from its circular mean; any other parameter its normal score in the prior. The centres
    affect only how fast a sampler is.

    Args:
        prior: the joint prior.
        theta: (N, P) draws of roughly the posterior.
    """
    place = {parameter.name: column for column, parameter in enumerate(prior.parameters)}
    late: list[Chart] = []
    if {"rate", "radius", "spin"} <= place.keys():
        rate = place["rate"]
        late.append(FrequencyChart(rate, place["radius"], place["spin"], prior.parameters[rate].prior))
    if _isotropic_axis(prior.parameters, place):
        late.append(_axis_chart(place["tilt"], place["pitch"], theta))
    taken = {column for chart in late for column in chart.columns}
    early = [_single(column, parameter, theta[:, column])
             for column, parameter in enumerate(prior.parameters) if column not in taken]
    return SamplingCoordinates(prior, (*early, *late))


def _single(column: int, parameter: Parameter, values: Array) -> Chart:
    """Choose the chart of a parameter on its own."""
    if not parameter.circular:
        return GaussChart(column, parameter.prior)
    turned = np.radians(values)
    centre = np.degrees(np.arctan2(np.sin(turned).mean(), np.cos(turned).mean()))
    return CircleChart(column, parameter.prior, float(centre))


def _isotropic_axis(parameters: tuple[Parameter, ...], place: dict[str, int]) -> bool:
    """Tell whether tilt and pitch describe an isotropic axis over its whole range."""
    if not {"tilt", "pitch"} <= place.keys():
        return False
    return (parameters[place["tilt"]].prior == Uniform(0.0, 180.0)
            and parameters[place["pitch"]].prior == SinUniform(-90.0, 90.0))


def _axis_chart(tilt: int, pitch: int, theta: Array) -> AxisChart:
    """Centre the disc on the principal axis of the draws."""
    axis = field_axis(theta[:, tilt], theta[:, pitch])
    _, vectors = np.linalg.eigh(axis.T @ axis)  # ascending: the last is the mean axis
    frame = vectors.T[::-1]
    return AxisChart(tilt, pitch, tuple((float(a), float(b), float(c)) for a, b, c in frame))
