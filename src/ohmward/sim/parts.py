"""Simulated parts: one is drawn from its model by the seed, then behaves as a linear network.

A part's network is rebuilt when bias, temperature or the part's condition change and solved at
each new frequency; all are remembered, so that a reading at a standing point costs next to nothing.
"""

import itertools
import math

from ohmward.sim.build import BUILD, Figures
from ohmward.sim.draw import FAULTS, REFERENCE_C, Condition, UnknownFault, draw
from ohmward.sim.network import C, Network, Parallel, R, Series
from ohmward.sim.physical import PartModel, PartTruth
from ohmward.sim.views import views_of

__all__ = ["FAULTS", "REFERENCE_C", "PhysicalPart", "UnknownFault"]

_REMEMBERED = 4096


class PhysicalPart:
    """One part: its impedance at any condition, and the true value of any quantity."""

    def __init__(
        self,
        *,
        part_id: str,
        model: PartModel,
        truth: PartTruth,
        nominal: float,
        tolerance: float,
        rated_v: float,
        rated_a: float,
        seed: int,
    ) -> None:
        drawn = draw(
            model,
            truth,
            nominal=nominal,
            tolerance=tolerance,
            rated_v=rated_v,
            seed=seed,
            part_id=part_id,
        )
        self.part_id = part_id
        self.kind = model.kind
        self.fault = truth.fault
        self._figures = Figures(
            model=model,
            drawn=drawn,
            rated_v=rated_v,
            rated_a=rated_a,
            condition=Condition(formed_v=drawn.formed_v),
        )
        self._networks: dict[tuple[float, float, float], Network] = {}
        self._solved: dict[tuple[float, float, float, float], complex] = {}

    @property
    def figures(self) -> Figures:
        """All that its behaviour hangs on, as it is now."""
        return self._figures

    def change(self, condition: Condition) -> None:
        """Something has happened to it: from now on it is so."""
        old = self._figures
        self._figures = Figures(
            model=old.model,
            drawn=old.drawn,
            rated_v=old.rated_v,
            rated_a=old.rated_a,
            condition=condition,
        )
        self._networks.clear()
        self._solved.clear()

    def impedance(
        self,
        frequency_hz: float,
        bias_v: float = 0.0,
        level_v: float = 0.0,
        temperature_c: float = REFERENCE_C,
        bias_a: float = 0.0,
    ) -> complex:
        """Impedance in ohm at the part's terminals; ``level_v`` is too small to matter here."""
        temperature_c = round(temperature_c, 2)  # a room drifts; a hundredth of a kelvin is nothing
        key = (frequency_hz, bias_v, temperature_c, bias_a)
        found = self._solved.get(key)
        if found is None:
            if len(self._solved) >= _REMEMBERED:
                self._solved.clear()
            network = self.network(bias_v, temperature_c, bias_a)
            found = self._solved[key] = network.impedance(2j * math.pi * frequency_hz)
        return found

    def resistance_dc_ohm(self) -> float:
        """Resistance to direct current, in ohm; infinite for a perfect insulator."""
        return self.network(0.0, REFERENCE_C, 0.0).impedance(0j).real

    def network(self, bias_v: float, temperature_c: float, bias_a: float) -> Network:
        """The linear network that the part is at this bias and temperature."""
        key = (bias_v, temperature_c, bias_a)
        found = self._networks.get(key)
        if found is None:
            if len(self._networks) >= _REMEMBERED:
                self._networks.clear()
            found = self._networks[key] = self._built(*key)
        return found

    def _built(self, bias_v: float, temperature_c: float, bias_a: float) -> Network:
        drawn, condition = self._figures.drawn, self._figures.condition
        found = BUILD[self.kind](self._figures, bias_v, temperature_c, bias_a)
        for short_ohm in (drawn.short_ohm, condition.short_ohm):
            if short_ohm:
                found = Parallel(found, R(short_ohm))
        return Series(found, C(drawn.gap_f)) if drawn.gap_f else found

    def truth(
        self,
        quantity: str,
        *,
        frequency_hz: float = math.nan,
        bias_v: float = 0.0,
        level_v: float = 0.0,
        bias_a: float = 0.0,
        temperature_c: float = REFERENCE_C,
    ) -> float:
        """The true value of a quantity, SI; NaN where the part has none."""
        if quantity == "self_resonance_hz":
            return self._self_resonance_hz(bias_v, temperature_c, bias_a)
        if quantity in ("capacitance_change", "inductance_change"):
            name = quantity.replace("_change", "_f" if quantity.startswith("c") else "_h")
            here = self._views(frequency_hz, bias_v, temperature_c, bias_a).get(name, math.nan)
            least = self._views(frequency_hz, 0.0, temperature_c, 0.0).get(name, math.nan)
            return here / least - 1
        return self._views(frequency_hz, bias_v, temperature_c, bias_a).get(quantity, math.nan)

    def _views(
        self, frequency_hz: float, bias_v: float, temperature_c: float, bias_a: float
    ) -> dict[str, float]:
        z = self.impedance(frequency_hz, bias_v, 0.0, temperature_c, bias_a)
        return views_of(z, frequency_hz) if math.isfinite(z.real) else {}

    def _self_resonance_hz(self, bias_v: float, temperature_c: float, bias_a: float) -> float:
        """The lowest frequency from 1 Hz to 10 GHz at which X changes sign, by bisection."""
        network = self.network(bias_v, temperature_c, bias_a)

        def reactance(frequency_hz: float) -> float:
            return network.impedance(2j * math.pi * frequency_hz).imag

        grid = [10 ** (step / 20) for step in range(201)]
        for low, high in itertools.pairwise(grid):
            below = reactance(low) < 0
            if below == (reactance(high) < 0):
                continue
            for _ in range(60):
                middle = math.sqrt(low * high)
                low, high = (middle, high) if (reactance(middle) < 0) == below else (low, middle)
            return math.sqrt(low * high)
        return math.nan
