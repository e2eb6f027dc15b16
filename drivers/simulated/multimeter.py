"""The simulated multimeter: DC and AC volts, ohms, in ranges, integrating over whole mains cycles.

Every range is off by a gain and an offset that the instrument has drawn once, within its specification. The
input resistance is the world's affair: the world knows what the meter loads.
"""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import dataclass
from typing import Literal

import numpy as np

from drivers.simulated.scpi_device import Command, ScpiDevice, format_number
from drivers.simulated.scpi_status import ScpiError
from drivers.simulated.scpi_syntax import Boolean, Choice, Number, Text, Whole
from drivers.simulated.terminals import Terminals

OVERLOAD = 9.9e37
"""SCPI-1999 volume 1, 7.2.1.4: infinity, what an overloaded input reads."""

Function = Literal["VOLT", "VOLT:AC", "RES"]
_PLC_CHOICES = (0.02, 0.2, 1.0, 10.0, 100.0)


@dataclass(frozen=True)
class MeterRange:
    """One range: limits of error +-(ratio of reading + offset), resolution and noise (1 sd) at 1 PLC."""

    full_scale: float
    ratio: float
    offset: float
    resolution: float
    noise: float = 0.0
    test_amps: float = 0.0


def _volt_ranges(ratio: float, offset_ratio: float, scales: tuple[float, ...]) -> tuple[MeterRange, ...]:
    return tuple(
        MeterRange(scale, ratio, offset_ratio * scale, scale * 1e-6, scale * 2e-6) for scale in scales
    )


_OHM_TEST = ((100.0, 1e-3), (1e3, 1e-3), (1e4, 1e-4), (1e5, 1e-5), (1e6, 5e-6), (1e7, 5e-7))


@dataclass(frozen=True)
class MultimeterSpec:
    """What a multimeter can do and how well; ranges in rising order."""

    dc: tuple[MeterRange, ...] = _volt_ranges(0.00005, 0.00004, (0.1, 1.0, 10.0, 100.0, 1000.0))
    ac: tuple[MeterRange, ...] = _volt_ranges(0.0006, 0.0003, (0.1, 1.0, 10.0, 100.0, 750.0))
    ohms: tuple[MeterRange, ...] = tuple(
        MeterRange(scale, 0.0001, 0.00004 * scale, scale * 1e-6, scale * 2e-6, amps)
        for scale, amps in _OHM_TEST
    )
    over_range: float = 1.2
    mains_hz: float = 50.0
    ac_aperture_s: float = 0.2


@dataclass
class _Settings:
    range_index: int
    auto: bool = True
    plc: float = 1.0


class SimulatedMultimeter(ScpiDevice):
    """A multimeter at the terminals of a world.

    Parameters
    ----------
    terminals : Terminals
        Where the meter touches the world.
    errors, noise : numpy.random.Generator
        `errors` draws what this instrument is off by, once; `noise` what varies from reading to reading.
    """

    def __init__(
        self,
        terminals: Terminals,
        *,
        errors: np.random.Generator,
        noise: np.random.Generator,
        spec: MultimeterSpec | None = None,
        identity: str = "toeline,simulated multimeter,M-0001,1.0",
    ) -> None:
        self.spec = spec = MultimeterSpec() if spec is None else spec
        self._terminals = terminals
        self._noise = noise
        self._ranges: dict[Function, tuple[MeterRange, ...]] = {
            "VOLT": spec.dc,
            "VOLT:AC": spec.ac,
            "RES": spec.ohms,
        }
        self._errors = {
            (function, index): (
                errors.uniform(-row.ratio, row.ratio),
                errors.uniform(-row.offset, row.offset),
            )
            for function, rows in self._ranges.items()
            for index, row in enumerate(rows)
        }
        self._power_on_settings()
        super().__init__(identity, self._commands(), now_s=terminals.now_s)

    def _power_on_settings(self) -> None:
        self.function: Function = "VOLT"
        self.count = 1
        self._settings = {function: _Settings(len(rows) - 1) for function, rows in self._ranges.items()}
        self._readings: list[float] | None = None

    def reset(self) -> None:
        """``*RST``: DC volts, autorange, 1 PLC, no readings."""
        self._power_on_settings()

    def _commands(self) -> tuple[Command, ...]:
        return (
            Command("READ?", self._read),
            Command("INITiate[:IMMediate]", self._initiate),
            Command("FETCh?", self._fetch),
            Command("CONFigure?", self._configuration),
            Command("SAMPle:COUNt", self._put_count, (Whole(1, 10_000),)),
            Command("SAMPle:COUNt?", lambda: str(self.count)),
            Command("TRIGger:SOURce", lambda source: None, (Choice(("IMMediate",)),)),
            Command("TRIGger:SOURce?", lambda: "IMM"),
            Command("[SENSe:]FUNCtion[:ON]", self._put_function, (Text(),)),
            Command("[SENSe:]FUNCtion[:ON]?", lambda: f'"{self.function}"'),
            *self._function_commands("VOLTage[:DC]", "VOLT", "V"),
            *self._function_commands("VOLTage:AC", "VOLT:AC", "V"),
            *self._function_commands("RESistance", "RES", "OHM"),
        )

    def _function_commands(self, header: str, function: Function, unit: str) -> tuple[Command, ...]:
        rows = self._ranges[function]

        def settings() -> _Settings:
            return self._settings[function]

        def low() -> float:
            return rows[0].full_scale

        def high() -> float:
            return rows[-1].full_scale

        typed_range = Number(unit, lambda: 0.0, high, high)
        measured = (
            Number(unit, lambda: 0.0, high, high, optional=True, words=("AUTO",)),
            Number(unit, lambda: 0.0, high, lambda: 0.0, optional=True),
        )
        commands = [
            Command(f"CONFigure[:SCALar]:{header}", self._configure(function), measured),
            Command(f"MEASure[:SCALar]:{header}?", self._measure(function), measured),
            Command(
                f"[SENSe:]{header}:RANGe[:UPPer]",
                lambda value: self._put_range(function, value),
                (typed_range,),
            ),
            Command(
                f"[SENSe:]{header}:RANGe[:UPPer]?",
                lambda word: format_number(
                    {"MIN": low, "MAX": high}[word]() if word else rows[settings().range_index].full_scale
                ),
                (Choice(("MINimum", "MAXimum"), optional=True),),
            ),
            Command(
                f"[SENSe:]{header}:RANGe:AUTO", lambda auto: setattr(settings(), "auto", auto), (Boolean(),)
            ),
            Command(f"[SENSe:]{header}:RANGe:AUTO?", lambda: str(int(settings().auto))),
        ]
        if function != "VOLT:AC":
            plc = Number("", lambda: _PLC_CHOICES[0], lambda: _PLC_CHOICES[-1], lambda: 1.0)
            commands += [
                Command(f"[SENSe:]{header}:NPLCycles", lambda value: self._put_plc(function, value), (plc,)),
                Command(f"[SENSe:]{header}:NPLCycles?", lambda: format_number(settings().plc)),
            ]
        return tuple(commands)

    # -- settings ------------------------------------------------------------------------------------------

    def _put_count(self, count: int) -> None:
        self.count = count

    def _put_function(self, text: str) -> None:
        names: dict[str, Function] = {"VOLT": "VOLT", "VOLT:DC": "VOLT", "VOLT:AC": "VOLT:AC", "RES": "RES"}
        names |= {"VOLTAGE": "VOLT", "VOLTAGE:DC": "VOLT", "VOLTAGE:AC": "VOLT:AC", "RESISTANCE": "RES"}
        if text.upper() not in names:
            raise ScpiError(-224)
        self.function = names[text.upper()]
        self._readings = None

    def _put_range(self, function: Function, value: float) -> None:
        rows, settings = self._ranges[function], self._settings[function]
        settings.range_index = next(index for index, row in enumerate(rows) if value <= row.full_scale)
        settings.auto = False

    def _put_plc(self, function: Function, value: float) -> None:
        self._settings[function].plc = next(choice for choice in _PLC_CHOICES if value <= choice)

    def _configure(self, function: Function) -> Callable[[float | None, float | None], None]:
        def configure(wanted: float | None, resolution: float | None) -> None:
            self.function = function
            self._readings = None
            self._settings[function] = _Settings(len(self._ranges[function]) - 1)
            if wanted is not None and wanted == wanted:  # NaN stands for AUTO
                self._put_range(function, wanted)

        return configure

    def _measure(self, function: Function) -> Callable[[float | None, float | None], str]:
        def measure(wanted: float | None, resolution: float | None) -> str:
            self._configure(function)(wanted, resolution)
            self.count = 1
            return self._read()

        return measure

    def _configuration(self) -> str:
        row = self._ranges[self.function][self._settings[self.function].range_index]
        return f'"{self.function} {format_number(row.full_scale)},{format_number(row.resolution)}"'

    # -- readings ------------------------------------------------------------------------------------------

    def _initiate(self) -> None:
        self._readings = [self._one_reading() for _ in range(self.count)]

    def _fetch(self) -> str:
        if self._readings is None:
            raise ScpiError(-230)
        return ",".join(format_number(value) for value in self._readings)

    def _read(self) -> str:
        self._initiate()
        return self._fetch()

    def _raw(self, row: MeterRange, plc: float) -> float:
        aperture_s = plc / self.spec.mains_hz
        if self.function == "VOLT":
            return self._terminals.meter_dc_volts(aperture_s)
        if self.function == "RES":
            return self._terminals.meter_ohms(row.test_amps, aperture_s)
        return self._terminals.meter_ac_volts(self.spec.ac_aperture_s)

    def _one_reading(self) -> float:
        rows, settings = self._ranges[self.function], self._settings[self.function]
        if settings.auto:
            self._choose_range(rows, settings)
        row = rows[settings.range_index]
        value = self._raw(row, settings.plc)
        if not abs(value) <= self.spec.over_range * row.full_scale:
            return OVERLOAD if value > 0 or value != value else -OVERLOAD
        gain, offset = self._errors[self.function, settings.range_index]
        finer = math.sqrt(settings.plc)
        value = value * (1.0 + gain) + offset + row.noise / finer * self._noise.standard_normal()
        return round(value / row.resolution) * row.resolution

    def _choose_range(self, rows: tuple[MeterRange, ...], settings: _Settings) -> None:
        """Step up at 120 %, down at 10 % of the range, with a quick reading on each range tried."""
        for _ in range(2 * len(rows)):
            size = abs(self._raw(rows[settings.range_index], 0.2))
            full_scale = rows[settings.range_index].full_scale
            if not size <= self.spec.over_range * full_scale and settings.range_index < len(rows) - 1:
                settings.range_index += 1
            elif size < 0.1 * full_scale and settings.range_index > 0:
                settings.range_index -= 1
            else:
                return
