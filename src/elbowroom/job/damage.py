"""What is broken in a station: antennas that are missing, ports that are dead while their structure stays.

A missing antenna is no part of the structure.  A dead port stays and couples, open, shorted or with its amplifier off, and has
no weight in any beam.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field

from elbowroom.geometry.stations import PortName
from elbowroom.job.jobtables import DamageTable
from elbowroom.job.tomlfile import near_miss

OPEN, SHORTED, AMPLIFIER_OFF = "open", "shorted", "amplifier off"


@dataclass(frozen=True)
class Damage:
    """What is broken.

    Attributes
    ----------
    missing : tuple of str
        Antennas whose structure is absent.
    ports : dict of str to str
        ``open``, ``shorted`` or ``amplifier off``, by ``antenna/port``.
    """

    missing: tuple[str, ...] = ()
    ports: dict[str, str] = field(default_factory=dict)

    def state(self, name: PortName) -> str | None:
        """Return what is wrong with a port; None if nothing is."""
        return self.ports.get(str(name))

    def lines(self) -> list[str]:
        """Return it as ``key = value`` lines."""
        lines = []
        if self.missing:
            lines.append(f"station.damage.missing = {', '.join(self.missing)} (structure absent)")
        for state in (OPEN, SHORTED, AMPLIFIER_OFF):
            names = [name for name, found in self.ports.items() if found == state]
            if names:
                key = state.replace(" ", "_")
                lines.append(f"station.damage.{key} = {', '.join(names)} (structure stays; weight 0 in every beam)")
        return lines


def read_damage(table: DamageTable, port_names: Mapping[str, list[str]], problems: list[str]) -> Damage:
    """Return the damage that ``[station.damage]`` describes.

    Parameters
    ----------
    table : DamageTable
        The table.
    port_names : mapping of str to list of str
        Names of the ports of every antenna of the layout.
    problems : list of str
        Lengthened by a line for each unknown name, each one named twice, and if nothing is left of the station.
    """
    ports = [f"{antenna}/{port}" for antenna, names in port_names.items() for port in names]
    known_ports = set(ports)
    told: dict[str, str] = {}
    missing: list[str] = []
    states: dict[str, str] = {}
    for key, state in (("missing", ""), ("open", OPEN), ("shorted", SHORTED), ("amplifier_off", AMPLIFIER_OFF)):
        for i, name in enumerate(getattr(table, key)):
            where = f"station.damage.{key}[{i}]"
            if name in port_names:
                own = [f"{name}/{port}" for port in port_names[name]]
            elif key != "missing" and name in known_ports:
                own = [name]
            else:
                what = "antenna" if key == "missing" else "antenna or port"
                known = list(port_names) if key == "missing" else [*port_names, *ports]
                problems.append(f"{where}: no {what} {name!r}; {near_miss(name, known, 'known')}")
                continue
            twice = [told[port] for port in own if port in told]
            if twice:
                problems.append(f"{where}: {name!r} is named at {twice[0]} already")
                continue
            told.update(dict.fromkeys(own, where))
            if key == "missing":
                missing.append(name)
            else:
                states.update(dict.fromkeys(own, state))
    if port_names and len(missing) == len(port_names):
        problems.append("station.damage.missing: no antenna is left")
    return Damage(tuple(missing), states)
