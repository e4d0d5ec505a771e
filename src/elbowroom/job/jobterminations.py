"""What ``[termination]`` of a job file says, with the files it names read: from tables to terminations."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, field
from pathlib import Path

from elbowroom.base.errors import JobFileError, ModelRangeError
from elbowroom.geometry.stations import PortName
from elbowroom.job.jobtables import OnePort, PortTerminationTable, TerminationTable
from elbowroom.job.tomlfile import key_path, near_miss, validate_table
from elbowroom.job.touchstone import reflection_from_file
from elbowroom.system.terminations import (
    ActiveImpedance,
    ParallelCircuit,
    PortTermination,
    SampledReflection,
    SeriesCircuit,
    negative_resistance,
    port_termination_text,
)

ORDINARY_OHM = 100.0
"""What every port sees where the job file says nothing [ohm]."""


@dataclass(frozen=True)
class Terminations:
    """What ports see at every frequency.

    Attributes
    ----------
    every : PortTermination
        What all ports see that are not named.
    of_antenna, of_port : dict of str to PortTermination
        Exceptions by antenna, and by ``antenna/port``, which go before those by antenna.
    amplifier_off : PortTermination or None
        What a port sees whose amplifier is off.
    """

    every: PortTermination = ORDINARY_OHM
    of_antenna: dict[str, PortTermination] = field(default_factory=dict)
    of_port: dict[str, PortTermination] = field(default_factory=dict)
    amplifier_off: PortTermination | None = None

    def of(self, name: PortName) -> PortTermination:
        """Return what a port sees while nothing is broken."""
        return self.of_port.get(str(name), self.of_antenna.get(name.antenna, self.every))

    def named(self) -> dict[str, PortTermination]:
        """Return every termination by its key in the job file."""
        terminations = {"termination": self.every}
        terminations |= {f"termination.antennas.{name}": termination for name, termination in self.of_antenna.items()}
        terminations |= {f"termination.ports.{name}": termination for name, termination in self.of_port.items()}
        if self.amplifier_off is not None:
            terminations["termination.amplifier_off"] = self.amplifier_off
        return terminations

    def lines(self) -> list[str]:
        """Return it as ``key = value`` lines."""
        named = self.named()
        plain = not isinstance(self.every, SeriesCircuit | ParallelCircuit | SampledReflection)
        first = "termination.impedance_ohm" if plain else "termination"
        return [
            f"{first if key == 'termination' else key} = {port_termination_text(termination)}"
            for key, termination in named.items()
        ]

    def doubts(self) -> list[str]:
        """Return what is to be warned of."""
        return [
            f"{key} = {port_termination_text(termination)}: the resistance is negative; "
            "whether the station then oscillates is not looked at"
            for key, termination in self.named().items()
            if negative_resistance(termination)
        ]


class TerminationReader:
    """Turns values and tables into terminations, adding what is wrong to the problems of a job file.

    Parameters
    ----------
    folder : Path
        Where relative paths count from.
    frequencies_hz : sequence of float
        Rising frequencies at which every termination must be known [Hz].
    problems : list of str
        Lengthened by a line for each problem.
    """

    def __init__(self, folder: Path, frequencies_hz: Sequence[float], problems: list[str]) -> None:
        self.folder, self.frequencies_hz, self.problems = folder, frequencies_hz, problems
        self._read: dict[tuple[Path, bool], SampledReflection] = {}

    def terminations(self, table: TerminationTable, port_names: dict[str, list[str]]) -> Terminations:
        """Return what ``[termination]`` says for antennas with these ports."""
        ports = [f"{antenna}/{port}" for antenna, names in port_names.items() for port in names]
        of_antenna = self._named("antennas", table.antennas, list(port_names), "antenna")
        of_port = self._named("ports", table.ports, ports, "port")
        off = table.amplifier_off
        every = self._from_table(table, ("termination",))
        return Terminations(
            ORDINARY_OHM if every is None else every,
            of_antenna,
            of_port,
            None if off is None else self._one(off, ("termination", "amplifier_off")),
        )

    def _named(self, key: str, entries: dict[str, OnePort | dict], known: list[str], noun: str) -> dict[str, PortTermination]:
        terminations: dict[str, PortTermination] = {}
        known_set = set(known)
        for name, entry in entries.items():
            if name not in known_set:
                hint = near_miss(name, known, noun + "s")
                self.problems.append(f"{key_path('termination', key, name)}: no such {noun}; {hint}")
                continue
            termination = self._one(entry, ("termination", key, name))
            if termination is not None:
                terminations[name] = termination
        return terminations

    def _one(self, entry: OnePort | dict, where: tuple[str, ...]) -> PortTermination | None:
        if not isinstance(entry, dict):
            return entry
        table = validate_table(PortTerminationTable, entry, self.problems, where)
        if table is None:
            return None
        termination = self._from_table(table, where)
        if termination is None and table.file is None:
            self.problems.append(
                f"{key_path(*where)}: an empty table; expected impedance_ohm, file, or circuit with resistance_ohm, inductance_h "
                "or capacitance_f"
            )
        return termination

    def _from_table(self, table: PortTerminationTable, where: tuple[str, ...]) -> PortTermination | None:
        """Return the termination of a table; None if it names none or its file cannot be used."""
        active = table.allow_negative_resistance
        if table.file is not None:
            return self._from_file(self.folder / table.file, active, where)
        if table.circuit == "series":
            return SeriesCircuit(table.resistance_ohm or 0.0, table.inductance_h or 0.0, table.capacitance_f, active)
        if table.circuit == "parallel":
            return ParallelCircuit(table.resistance_ohm, table.inductance_h, table.capacitance_f or 0.0, active)
        value: OnePort | None = table.impedance_ohm
        if active and value is not None and not isinstance(value, str) and complex(value).real < 0.0:
            return ActiveImpedance(value)
        return value

    def _from_file(self, path: Path, active: bool, where: tuple[str, ...]) -> PortTermination | None:
        key = key_path(*where, "file")
        try:
            if (path, active) not in self._read:
                self._read[path, active] = reflection_from_file(path, allow_negative_resistance=active)
        except JobFileError as cause:
            self.problems.append(f"{key}: {cause}")
            return None
        except ModelRangeError as cause:
            self.problems.append(f"{key}: {cause}; allow_negative_resistance = true lets it in")
            return None
        termination = self._read[path, active]
        try:
            for frequency in (*self.frequencies_hz[:1], *self.frequencies_hz[-1:]):
                termination.reflection_at(frequency)
        except ModelRangeError as cause:
            self.problems.append(f"{key}: {cause}; [band] asks for it")
            return None
        return termination
