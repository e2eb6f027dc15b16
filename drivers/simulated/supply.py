"""The simulated bench supply: one output with current limit and over-voltage protection.

Settings and read-back are off by errors that every instrument has drawn once, within its specification.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from drivers.simulated.scpi_device import Command, ScpiDevice, format_number, number_setting
from drivers.simulated.scpi_status import ScpiError
from drivers.simulated.scpi_syntax import Boolean
from drivers.simulated.terminals import Terminals

CURRENT_LIMIT_BIT = 1 << 0
"""Questionable condition: the voltage is not regulated, the current limit is at work (common practice)."""
OVER_VOLTAGE_BIT = 1 << 9
"""Questionable condition: the over-voltage protection has acted (common practice)."""


@dataclass(frozen=True)
class SupplySpec:
    """What a supply can do and how well: limits of error are +-(ratio of value + offset)."""

    max_volts: float = 20.0
    max_amps: float = 1.0
    max_protection_volts: float = 22.0
    set_volts_ratio: float = 0.0005
    set_volts_offset: float = 0.005
    set_amps_ratio: float = 0.002
    set_amps_offset: float = 0.002
    read_volts_ratio: float = 0.0005
    read_volts_offset: float = 0.005
    read_volts_resolution: float = 0.001
    read_amps_ratio: float = 0.002
    read_amps_offset: float = 0.0005
    read_amps_resolution: float = 0.0001
    noise_volts: float = 0.0002
    noise_amps: float = 0.00002
    read_s: float = 0.02


@dataclass(frozen=True)
class _Error:
    ratio: float
    offset: float

    @classmethod
    def draw(cls, ratio: float, offset: float, generator: np.random.Generator) -> _Error:
        return cls(generator.uniform(-ratio, ratio), generator.uniform(-offset, offset))

    def apply(self, value: float) -> float:
        return value * (1.0 + self.ratio) + self.offset


class SimulatedSupply(ScpiDevice):
    """A supply at the terminals of a world.

    Parameters
    ----------
    terminals : Terminals
        Where the supply touches the world.
    errors, noise : numpy.random.Generator
        `errors` draws what this instrument is off by, once; `noise` what varies from reading to reading.
    """

    def __init__(
        self,
        terminals: Terminals,
        *,
        errors: np.random.Generator,
        noise: np.random.Generator,
        spec: SupplySpec | None = None,
        identity: str = "toeline,simulated supply,S-0001,1.0",
    ) -> None:
        self.spec = spec = SupplySpec() if spec is None else spec
        self._terminals = terminals
        self._noise = noise
        self._set_volts_error = _Error.draw(spec.set_volts_ratio, spec.set_volts_offset, errors)
        self._set_amps_error = _Error.draw(spec.set_amps_ratio, spec.set_amps_offset, errors)
        self._read_volts_error = _Error.draw(spec.read_volts_ratio, spec.read_volts_offset, errors)
        self._read_amps_error = _Error.draw(spec.read_amps_ratio, spec.read_amps_offset, errors)
        self.tripped = False
        self._power_on_settings()
        super().__init__(identity, self._commands(), now_s=terminals.now_s)

    def _power_on_settings(self) -> None:
        self.volts = 0.0
        self.amps = self.spec.max_amps
        self.protection_volts = self.spec.max_protection_volts
        self.on = False

    def _commands(self) -> tuple[Command, ...]:
        spec, zero = self.spec, lambda: 0.0
        return (
            *number_setting(
                "[SOURce:]VOLTage[:LEVel][:IMMediate][:AMPLitude]",
                "V",
                low=zero,
                high=lambda: spec.max_volts,
                default=zero,
                get=lambda: self.volts,
                put=self._put_volts,
            ),
            *number_setting(
                "[SOURce:]CURRent[:LEVel][:IMMediate][:AMPLitude]",
                "A",
                low=zero,
                high=lambda: spec.max_amps,
                default=lambda: spec.max_amps,
                get=lambda: self.amps,
                put=self._put_amps,
            ),
            *number_setting(
                "[SOURce:]VOLTage:PROTection[:LEVel]",
                "V",
                low=lambda: 1.0,
                high=lambda: spec.max_protection_volts,
                default=lambda: spec.max_protection_volts,
                get=lambda: self.protection_volts,
                put=self._put_protection,
            ),
            Command("[SOURce:]VOLTage:PROTection:TRIPped?", lambda: str(int(self.tripped))),
            Command("[SOURce:]VOLTage:PROTection:CLEar", self._clear_protection),
            Command("OUTPut:PROTection:CLEar", self._clear_protection),
            Command("OUTPut[:STATe]", self._put_output, (Boolean(),)),
            Command("OUTPut[:STATe]?", lambda: str(int(self.on))),
            Command("MEASure[:SCALar][:VOLTage][:DC]?", self._measure_volts),
            Command("MEASure[:SCALar]:CURRent[:DC]?", self._measure_amps),
        )

    def reset(self) -> None:
        """``*RST``: output off, 0 V, widest limits."""
        self._power_on_settings()
        self._drive()

    def refresh(self) -> None:
        """Look at the terminals: trip on over-voltage, report the current limit."""
        state = self._terminals.supply_terminals()
        if self.on and state.volts > self.protection_volts:
            self.tripped = True
            self.on = False
            self._drive()
        condition = OVER_VOLTAGE_BIT if self.tripped else 0
        if self.on and state.limited:
            condition |= CURRENT_LIMIT_BIT
        self.status.questionable.set_condition(condition)

    def _drive(self) -> None:
        self._terminals.drive_supply(
            volts=max(0.0, self._set_volts_error.apply(self.volts)) if self.volts else 0.0,
            limit_amps=max(0.0, self._set_amps_error.apply(self.amps)),
            on=self.on,
        )

    def _put_volts(self, value: float) -> None:
        self.volts = value
        self._drive()
        self.refresh()

    def _put_amps(self, value: float) -> None:
        self.amps = value
        self._drive()

    def _put_protection(self, value: float) -> None:
        self.protection_volts = value
        self.refresh()

    def _put_output(self, on: bool) -> None:
        if on and self.tripped:
            raise ScpiError(-221)
        self.on = on
        self._drive()
        self.refresh()

    def _clear_protection(self) -> None:
        self.tripped = False
        self.refresh()

    def _measure_volts(self) -> str:
        self._terminals.advance(self.spec.read_s)
        value = self._read_volts_error.apply(self._terminals.supply_terminals().volts)
        return self._rounded(value, self.spec.noise_volts, self.spec.read_volts_resolution)

    def _measure_amps(self) -> str:
        self._terminals.advance(self.spec.read_s)
        value = self._read_amps_error.apply(self._terminals.supply_terminals().amps)
        return self._rounded(value, self.spec.noise_amps, self.spec.read_amps_resolution)

    def _rounded(self, value: float, noise: float, resolution: float) -> str:
        return format_number(round((value + noise * self._noise.standard_normal()) / resolution) * resolution)
