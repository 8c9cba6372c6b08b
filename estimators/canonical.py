"""Properties of one state from its own samples: averages and fluctuations, at constant temperature or energy."""

from __future__ import annotations

import operator
from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass, replace
from functools import cached_property, reduce

import numpy as np
import numpy.typing as npt

from estimators.covariance import covariance
from estimators.errors import BadSeries
from estimators.estimate import Chain, Estimate, combine, mean
from sampler.series import Series

__all__ = ["NEEDS", "kinetic_temperature", "rung_properties"]

Floats = npt.NDArray[np.float64]
Recorded = dict[Chain, Floats]
NEEDS: Mapping[str, tuple[str, ...]] = {
    "residual_energy": ("energy",),
    "residual_heat_capacity": ("energy", "sampled_energy"),
    "pressure": ("virial",),
    "compressibility_factor": ("virial",),
    "thermal_pressure": ("virial", "sampled_energy"),
    "bulk_modulus": ("virial", "hypervirial"),
    "heat_capacity": ("sampled_energy",),
}
"""Columns of the series that a property is made of."""


def rung_properties(series: Sequence[Series], *, contact: Estimate | None = None) -> dict[str, Estimate]:
    """Properties of one rung from all its repeats, already cut; reduced units.

    series : repeats of one state of one fluid, all with or all without a bath
    contact : g(r_c), for the bulk modulus of a fluid whose force jumps at the cutoff; without it that key is left out

    Keys: residual_energy (U/N), residual_heat_capacity (per particle, d<U>/dT at constant volume), pressure,
    compressibility_factor, thermal_pressure, bulk_modulus (isothermal); those only whose columns (NEEDS) were recorded.
    Where molecules are flexible there is no `energy`, but a U_dyn that holds what is within molecules, and `freedom`:
    then heat_capacity, of all that moves, var(U_dyn)/(N T^2) + f/(2 N).

    With a bath, at the set temperature T (U_dyn: the energy that the forces conserve, whose ensemble is drawn):
    c_v = cov(U, U_dyn)/(N T^2); P = rho T + <W>/V; gamma_V = rho + cov(W, U_dyn)/(V T^2);
    B_T = rho T + (<W> + <X>)/V - var(W)/(V T).

    Without a bath, energy and total momentum are constant. T = 2<K>/f with f = 3N - 3, and the heat capacity comes from
    the fluctuation of K (J. L. Lebowitz, J. K. Percus, L. Verlet, Phys. Rev. 153, 250 (1967)), in the form exact for
    any N (E. M. Pearson, T. Halicioglu, W. A. Tiller, Phys. Rev. A 32, 3030 (1985)). The residual part is the total
    less f/2. gamma_V and B_T follow from derivatives of the same phase volume; see `_ConstantEnergy`. The state's own
    temperature is then the nominal one and is not used. Repeats differ in energy, so fluctuations are those within each
    repeat, about its own means.
    Raises BadSeries if the series are none, empty, not finite, or not of one state.
    """
    _check(series)
    rung = _ConstantTemperature(series) if series[0].bath else _ConstantEnergy(series)
    made: dict[str, Callable[[], Estimate]] = {
        "residual_energy": lambda: rung.mean_of(_energy) / rung.particles,
        "residual_heat_capacity": lambda: rung.heat_capacity,
        "pressure": lambda: rung.pressure,
        "compressibility_factor": lambda: rung.compressibility_factor,
        "thermal_pressure": lambda: rung.thermal_pressure,
        "bulk_modulus": lambda: rung.bulk_modulus,
    }
    freedom = series[0].freedom
    if freedom is not None and not any(each.has("energy") for each in series):
        made["heat_capacity"] = lambda: (
            rung.covariance_of(_sampled_energy, _sampled_energy)
            * (1.0 / (rung.particles * series[0].state.temperature ** 2))
            + 0.5 * freedom / rung.particles
        )
    fluid = series[0].fluid
    surface = fluid.surface_hypervirial(rung.density) if fluid.has_pairs else 0.0
    if surface and contact is not None:
        made["bulk_modulus"] = lambda: replace(
            rung.bulk_modulus + contact * (rung.density * surface), method="fluctuation"
        )
    elif surface:
        del made["bulk_modulus"]
    return {name: make() for name, make in made.items() if all(each.has(*NEEDS[name]) for each in series)}


def kinetic_temperature(series: Sequence[Series]) -> Estimate:
    """Temperature from the mean kinetic energy of the repeats of one rung, 2<K>/f, epsilon/k_B."""
    _check(series)
    rung = _Rung(series) if series[0].bath else _ConstantEnergy(series)
    return rung.mean_of(_kinetic) * (2.0 / series[0].kinetic_freedom)


def _check(series: Sequence[Series]) -> None:
    if not series:
        raise BadSeries("no series given; a rung needs at least one repeat")
    first = series[0]
    if any((each.fluid, each.state, each.bath) != (first.fluid, first.state, first.bath) for each in series):
        raise BadSeries("series of different fluids, states or baths given; repeats of one rung share all three")
    if len({each.repeat for each in series}) < len(series):
        raise BadSeries("two series carry the same repeat number; give each repeat once")


def _energy(series: Series) -> Floats:
    return series.column("energy")


def _sampled_energy(series: Series) -> Floats:
    return series.column("sampled_energy")


def _virial(series: Series) -> Floats:
    return series.column("virial")


def _stiffness(series: Series) -> Floats:
    return series.column("virial") + series.column("hypervirial")


def _kinetic(series: Series) -> Floats:
    return series.column("kinetic")


def _recorded(series: Sequence[Series], observable: Callable[[Series], Floats]) -> Recorded:
    return {each.chain: observable(each) for each in series}


@dataclass(frozen=True)
class _Rung:
    series: Sequence[Series]

    @property
    def density(self) -> float:
        return self.series[0].state.density

    @property
    def particles(self) -> int:
        return self.series[0].state.particles

    @property
    def volume(self) -> float:
        return self.series[0].state.volume

    def mean_of(self, observable: Callable[[Series], Floats]) -> Estimate:
        return mean(_recorded(self.series, observable))

    def covariance_of(self, first: Callable[[Series], Floats], second: Callable[[Series], Floats]) -> Estimate:
        return covariance(_recorded(self.series, first), _recorded(self.series, second))


@dataclass(frozen=True)
class _ConstantTemperature(_Rung):
    @property
    def temperature(self) -> float:
        return self.series[0].state.temperature

    @property
    def heat_capacity(self) -> Estimate:
        scale = self.particles * self.temperature**2
        return self.covariance_of(_energy, _sampled_energy) / scale

    @property
    def pressure(self) -> Estimate:
        return self.mean_of(_virial) / self.volume + self.density * self.temperature

    @property
    def compressibility_factor(self) -> Estimate:
        return self.pressure / (self.density * self.temperature)

    @property
    def thermal_pressure(self) -> Estimate:
        scale = self.volume * self.temperature**2
        return self.covariance_of(_virial, _sampled_energy) / scale + self.density

    @property
    def bulk_modulus(self) -> Estimate:
        stiffness = self.mean_of(_stiffness) / self.volume
        softening = self.covariance_of(_virial, _virial) / (self.volume * self.temperature)
        return replace(stiffness - softening + self.density * self.temperature, method="fluctuation")


@dataclass(frozen=True)
class _ConstantEnergy(_Rung):
    """Exact relations of the constant-energy ensemble with a = f/2 and S = ln of the phase volume below E.

    A configuration weighs K^(a-1), so d<A>/dE = (a-1) cov(A, 1/K) for any A of the configuration, T = <K>/a,
    1/C = dT/dE. With the virial W of the forces that act (no long-range part), V dK/dV = W at constant energy, so
    dP/dE and dP/dV follow by differentiation, and B_T = -V (dP/dV)_E - V (gamma_V/C)(T gamma_V - P). The long-range
    parts of W and X, constant while the energy fluctuates, are added to P and B_T.
    """

    def mean_of(self, observable: Callable[[Series], Floats]) -> Estimate:
        return self._within_repeats(lambda rung: rung.mean_of(observable))

    def covariance_of(self, first: Callable[[Series], Floats], second: Callable[[Series], Floats]) -> Estimate:
        """Within repeats; the influences are about the common covariance, as repeats scatter about that."""
        one, other = (
            {chain: values - np.mean(values) for chain, values in _recorded(self.series, each).items()}
            for each in (first, second)
        )
        value = self._within_repeats(lambda rung: rung.covariance_of(first, second)).value
        return replace(covariance(one, other), value=value)

    def _within_repeats(self, estimate: Callable[[_Rung], Estimate]) -> Estimate:
        """Of each repeat by itself, averaged by number of samples: their energies differ."""
        samples = sum(map(len, self.series))
        return reduce(operator.add, (estimate(_Rung([one])) * (len(one) / samples) for one in self.series))

    @property
    def _a(self) -> float:
        return 0.5 * self.series[0].kinetic_freedom

    @cached_property
    def _virial_tail(self) -> float:
        return self.particles * self.series[0].fluid.tail(self.density)[1]

    def _acting(self, each: Series) -> Floats:
        return _virial(each) - self._virial_tail

    def _per_energy(self, observable: Callable[[Series], Floats]) -> Estimate:
        """d<A>/dE."""
        return self.covariance_of(observable, lambda s: 1.0 / _kinetic(s)) * (self._a - 1.0)

    @cached_property
    def temperature(self) -> Estimate:
        return kinetic_temperature(self.series)

    @cached_property
    def _capacity(self) -> Estimate:
        """Total heat capacity of the box: dE/dT."""
        return self._a / (self._per_energy(_kinetic) + 1.0)

    @property
    def heat_capacity(self) -> Estimate:
        capacity = self._capacity * self._per_energy(_energy) / self.particles
        return replace(capacity, method="fluctuation")

    @property
    def pressure(self) -> Estimate:
        return self.temperature * self.density + self.mean_of(_virial) / self.volume

    @property
    def compressibility_factor(self) -> Estimate:
        return replace(self.pressure / (self.temperature * self.density), method="average")

    @cached_property
    def thermal_pressure(self) -> Estimate:
        return self._capacity * self._per_energy(self._acting) / self.volume + self.density

    @property
    def bulk_modulus(self) -> Estimate:
        a, density, volume = self._a, self.density, self.volume
        stiffness = self.mean_of(_stiffness) / volume + self.temperature * density
        softening = self.covariance_of(self._acting, lambda s: self._acting(s) / _kinetic(s)) * ((a - 1.0) / volume)
        exchange = self.covariance_of(_kinetic, lambda s: self._acting(s) / _kinetic(s)) * (1.0 - 1.0 / a)
        exchange = (exchange + self.mean_of(self._acting) / a) * density
        heating = combine(
            lambda gamma, capacity, temperature, pressure: volume * gamma / capacity * (temperature * gamma - pressure),
            *(self.thermal_pressure, self._capacity, self.temperature, self.pressure - self._virial_tail / volume),
        )
        return replace(stiffness - softening - exchange - heating, method="fluctuation")
