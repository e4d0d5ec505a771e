"""A solved station at one frequency: port matrices, patterns and beams under any termination.

Nothing here solves a field problem again.  Terminations are algebra on port quantities, weights are applied to currents before
any field is computed, and every pattern is evaluated at exactly the directions asked for.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, field

import numpy as np
from numpy.typing import ArrayLike

from elbowroom.base.arrays import ComplexArray, FloatArray
from elbowroom.base.errors import ModelRangeError
from elbowroom.geometry.stations import PortName, Station
from elbowroom.radiation.beams import current_beams, pointing_weights
from elbowroom.radiation.patterns import CHUNK_DIRECTIONS, station_patterns
from elbowroom.radiation.power import PowerParts, power_parts
from elbowroom.system.discretisation import Discretisation
from elbowroom.system.plane_waves import KindWaves, direction_frame, phases
from elbowroom.system.port_algebra import (
    admittance_from_loaded,
    admittance_from_scattering,
    driven_ports,
    impedance_from_loaded,
    impedance_from_scattering,
    response_matrix,
    scattering_from_loaded,
    scattering_of_ports,
    scattering_renormalised,
)
from elbowroom.system.solving import PortCurrents, SolveStatistics
from elbowroom.system.spaces import CurrentSpace, all_unknowns, reduced_space
from elbowroom.system.terminations import Termination, reflection_of


@dataclass(frozen=True, eq=False)
class Solution:
    """What is known of a station once its currents are solved.

    Attributes
    ----------
    discretisation : Discretisation
        The station, its frequency and its meshes.
    coupled : PortCurrents
        Currents (N, P) and loaded admittance (P, P) of the whole station.
    isolated : tuple of PortCurrents
        For each antenna, the currents and loaded admittance of that antenna alone over the same ground; one for all of a kind.
    reference_ohm : float
        Resistance that loaded every port while solving [ohm].
    statistics : SolveStatistics
        Sizes, residual and times of the solve.
    space : CurrentSpace, optional
        Coordinates of the coupled currents; the unknowns by default.  Isolated currents are always unknowns.
    """

    discretisation: Discretisation
    coupled: PortCurrents
    isolated: tuple[PortCurrents, ...]
    reference_ohm: float
    statistics: SolveStatistics
    space: CurrentSpace = None  # type: ignore[assignment]
    _kept: dict[bytes, ComplexArray] = field(default_factory=dict, init=False, repr=False)

    def __post_init__(self) -> None:
        if self.space is None:
            object.__setattr__(self, "space", all_unknowns(self.discretisation))

    @property
    def station(self) -> Station:
        """The station."""
        return self.discretisation.station

    @property
    def frequency_hz(self) -> float:
        """Frequency [Hz]."""
        return self.discretisation.frequency_hz

    @property
    def port_names(self) -> tuple[PortName, ...]:
        """Antenna and port of every row of the port matrices."""
        return self.station.port_names

    def impedance_matrix(self) -> ComplexArray:
        """Return the open-circuit impedance matrix (P, P) [ohm]."""
        return impedance_from_loaded(self.coupled.loaded_admittance, self.reference_ohm)

    def admittance_matrix(self) -> ComplexArray:
        """Return the short-circuit admittance matrix (P, P) [S]."""
        return admittance_from_loaded(self.coupled.loaded_admittance, self.reference_ohm)

    def scattering_matrix(self, reference_ohm: complex | ArrayLike = 100.0) -> ComplexArray:
        """Return the scattering matrix (P, P), power waves where a reference impedance is complex.

        Parameters
        ----------
        reference_ohm : complex or complex (P,), optional
            Reference impedance of every port [ohm].
        """
        own = scattering_from_loaded(self.coupled.loaded_admittance, self.reference_ohm)
        if np.ndim(reference_ohm) == 0 and complex(reference_ohm) == self.reference_ohm:  # type: ignore[arg-type]
            return own
        return scattering_renormalised(own, self.reference_ohm, reference_ohm)

    def port_matrix(
        self,
        kind: str = "S",
        ports: Sequence[int] | np.ndarray | None = None,
        *,
        termination: Termination = 100.0,
        reference_ohm: complex | ArrayLike = 100.0,
    ) -> ComplexArray:
        """Return Z, Y or S of some ports while all others are terminated.

        Worked out through scattering parameters, so that terminations may be open or short.

        Parameters
        ----------
        kind : "S", "Z" or "Y", optional
            Which matrix.
        ports : sequence of int, optional
            The K ports wanted, each once, in the order of rows and columns; all by default.
        termination : number, "open", "short" or one of these per port, optional
            What the other ports see [ohm]; entries of the ports wanted are not looked at, but must be usable.
        reference_ohm : complex or complex (K,), optional
            Reference impedances of S [ohm].

        Returns
        -------
        complex128 (K, K)
            [-], [ohm] or [S].

        Raises
        ------
        ModelRangeError
            If the kind is unknown, a port does not exist, is named twice, or none is, or the termination cannot be used.
        """
        if kind not in ("S", "Z", "Y"):
            msg = f"port matrix {kind!r}: expected 'S', 'Z' or 'Y'"
            raise ModelRangeError(msg)
        rows = self._port_rows(ports)
        if rows.size == 0 or np.unique(rows).size < rows.size:
            msg = "ports: expected one port at least and each once"
            raise ModelRangeError(msg)
        whole = scattering_from_loaded(self.coupled.loaded_admittance, self.reference_ohm)
        reflection = reflection_of(termination, self.discretisation.n_ports, self.reference_ohm)
        found = scattering_of_ports(whole, rows, reflection)
        if kind == "Z":
            return impedance_from_scattering(found, self.reference_ohm)
        if kind == "Y":
            return admittance_from_scattering(found, self.reference_ohm)
        return scattering_renormalised(found, self.reference_ohm, reference_ohm)

    def active_impedance(self, weights: ArrayLike, *, termination: Termination = 100.0) -> ComplexArray:
        r"""Return what each port shows while all are driven at once, V/I.

        The weights are source waves behind the terminations: port p is driven by the voltage
        :math:`2 w_p \sqrt{\Re Z_{T,p}}` behind its termination :math:`Z_{T,p}`, so that w_p is the wave it sends.  With open
        terminations the weights are currents and with shorted ones voltages forced on the ports; ports with zero weight are
        terminated and couple.

        .. math:: (Z + Z_T) I = V_s, \quad V = Z I, \quad Z_{a,p} = V_p/I_p

        The weights that point a receiving beam (see :meth:`pointing_weights`) point the transmitted one the same way.

        Parameters
        ----------
        weights : complex (P,) or (B, P)
            w.
        termination : number, "open", "short" or one of these per port, optional
            What the ports see [ohm].

        Returns
        -------
        complex128 (P,) or (B, P)
            [ohm]; infinite where no current flows, NaN where the weight is zero.

        Raises
        ------
        ModelRangeError
            If weights or termination cannot be used, a driven port's termination has no positive resistance, or driven ports
            mix open or shorted ones with others.
        """
        voltage, current, table = self._driven(weights, termination)
        driven = table != 0.0
        flowing = driven & (current != 0.0)
        found = np.where(driven, complex(np.inf), complex(np.nan))
        found[flowing] = voltage[flowing] / current[flowing]
        return found if np.ndim(weights) == 2 else found[0]

    def active_reflection(
        self, weights: ArrayLike, *, termination: Termination = 100.0, reference_ohm: complex | ArrayLike | None = None
    ) -> ComplexArray:
        r"""Return the wave that comes back from each port over the wave sent into it while all are driven at once.

        .. math:: \Gamma_p = \frac{V_p - Z_p^* I_p}{V_p + Z_p I_p}

        with the termination as the reference Z_p by default: then it is the sum over q of S_pq w_q/w_p, with S power waves.
        What the weights drive is told in :meth:`active_impedance`.

        Parameters
        ----------
        weights : complex (P,) or (B, P)
            w.
        termination : number, "open", "short" or one of these per port, optional
            What the ports see [ohm].
        reference_ohm : complex or complex (P,), optional
            Reference impedances instead of the terminations [ohm]; needed where driven ports are open or shorted.

        Returns
        -------
        complex128 (P,) or (B, P)
            NaN where the weight is zero.

        Raises
        ------
        ModelRangeError
            As :meth:`active_impedance`, or if a reference has no positive real part.
        """
        voltage, current, table = self._driven(weights, termination)
        count = self.discretisation.n_ports
        driven = table != 0.0
        if reference_ohm is None:
            single = isinstance(termination, str) or np.ndim(termination) == 0
            seen: list = [termination] * count if single else list(termination)  # type: ignore[arg-type]
            reference = np.array([complex(np.nan) if isinstance(value, str) else complex(value) for value in seen])
            if not np.all(reference.real[np.any(driven, axis=0)] > 0.0):
                msg = "active reflection: driven ports are open or shorted; give reference_ohm, a resistance to refer to"
                raise ModelRangeError(msg)
        else:
            reference = np.broadcast_to(np.asarray(reference_ohm, dtype=complex), (count,))
            if not np.all(np.isfinite(reference)) or np.any(reference.real <= 0.0):
                msg = "reference impedance: expected a positive real part"
                raise ModelRangeError(msg)
        found = np.full(table.shape, complex(np.nan))
        sent, back = voltage + reference * current, voltage - reference.conj() * current
        found[driven] = back[driven] / sent[driven]
        return found if np.ndim(weights) == 2 else found[0]

    def _driven(self, weights: ArrayLike, termination: Termination) -> tuple[ComplexArray, ComplexArray, ComplexArray]:
        """Return voltages and currents (B, P) of ports driven by the weights, and these as a table."""
        table = self._checked_weights(weights)
        reflection = reflection_of(termination, self.discretisation.n_ports, self.reference_ohm)
        whole = scattering_from_loaded(self.coupled.loaded_admittance, self.reference_ohm)
        return *driven_ports(whole, self.reference_ohm, reflection, table), table

    def power_parts(self, weights: ArrayLike, *, termination: Termination = 100.0, integrate_sky: bool = True) -> PowerParts:
        """Return where the power goes that ports accept while they are driven at once.

        Weights and terminations as in :meth:`active_impedance`; the weights of a receiving beam give the parts of the beam sent
        in its direction, a single 1 among zeros those of one port.

        Parameters
        ----------
        weights : complex (P,) or (B, P)
            w.
        termination : number, "open", "short" or one of these per port, optional
            What the ports see [ohm].
        integrate_sky : bool, optional
            See :func:`elbowroom.radiation.power.power_parts`.

        Raises
        ------
        ModelRangeError
            As :meth:`active_impedance`.
        """
        voltage, current, _ = self._driven(weights, termination)
        return power_parts(
            self.discretisation, self.space, self.coupled.currents, self.reference_ohm, voltage, current,
            integrate_sky=integrate_sky,
        )  # fmt: skip

    def isolated_impedance(self, antenna: int) -> ComplexArray:
        """Return the impedance matrix [ohm] of the ports of one antenna standing alone over the ground."""
        return impedance_from_loaded(self.isolated[antenna].loaded_admittance, self.reference_ohm)

    def _response(self, termination: Termination) -> ComplexArray:
        reflection = reflection_of(termination, self.discretisation.n_ports, self.reference_ohm)
        key = reflection.tobytes()
        # Beams are formed again and again with one termination, and a large station's matrix takes a while to invert.
        kept = self._kept.get(key)
        if kept is None:
            kept = response_matrix(self.coupled.loaded_admittance, self.reference_ohm, reflection)
            self._kept.clear()
            self._kept[key] = kept
        return kept

    def _isolated_responses(self, termination: Termination) -> list[ComplexArray]:
        """Return, for each antenna, what its ports' currents alone count in its terminated receiving currents, (P, P)."""
        reflection = reflection_of(termination, self.discretisation.n_ports, self.reference_ohm)
        responses: list[ComplexArray] = []
        made: dict[tuple, ComplexArray] = {}
        for a, alone in enumerate(self.isolated):
            own = reflection[self.discretisation.ports_of(a)]
            key = (id(alone), own.tobytes())
            if key not in made:
                made[key] = response_matrix(alone.loaded_admittance, self.reference_ohm, own).T
            responses.append(made[key])
        return responses

    def _port_functions(self) -> list[ComplexArray]:
        """Return, for each kind of antenna, the currents (N, P) of its ports while it stands alone."""
        d = self.discretisation
        return [self.isolated[d.antennas_of(k)[0]].currents for k in range(len(d.kinds))]

    def _port_rows(self, ports: Sequence[int] | np.ndarray | None) -> np.ndarray:
        count = self.discretisation.n_ports
        rows = np.arange(count) if ports is None else np.asarray(ports, dtype=int)
        if rows.size and (rows.min() < 0 or rows.max() >= count):
            msg = f"ports: expected indices from 0 to {count - 1}, got {rows.min()} to {rows.max()}"
            raise ModelRangeError(msg)
        return rows

    def embedded_patterns(
        self,
        theta_rad: ArrayLike,
        phi_rad: ArrayLike,
        *,
        termination: Termination = 100.0,
        ports: Sequence[int] | np.ndarray | None = None,
        circumference: bool = True,
    ) -> ComplexArray:
        """Return embedded element patterns: the response of each port with all others terminated.

        Parameters
        ----------
        theta_rad, phi_rad : array_like
            Zenith angles and azimuths from east towards north [rad], of shapes that broadcast to D directions.
        termination : number, "open", "short" or one of these per port, optional
            What the ports see [ohm].
        ports : sequence of int, optional
            Ports wanted; all by default.
        circumference : bool, optional
            Whether currents fill their tubes (default) or their axes.

        Returns
        -------
        complex128 (P, D, 2)
            Receive effective length along theta_hat and phi_hat [m]: port voltage per unit incident field.  A shorted
            port gives its short-circuit current instead [m/ohm].
        """
        frame = direction_frame(theta_rad, phi_rad)
        amounts = self.coupled.currents @ self._response(termination)[self._port_rows(ports)].T
        return station_patterns(self.discretisation, amounts, frame, space=self.space, circumference=circumference)

    def isolated_patterns(
        self,
        theta_rad: ArrayLike,
        phi_rad: ArrayLike,
        *,
        termination: Termination = 100.0,
        ports: Sequence[int] | np.ndarray | None = None,
    ) -> ComplexArray:
        """Return isolated element patterns: each antenna alone, at its own place, over the same ground.

        Parameters and result are those of :meth:`embedded_patterns`.
        """
        d = self.discretisation
        frame = direction_frame(theta_rad, phi_rad)
        rows = self._port_rows(ports)
        responses, functions = self._isolated_responses(termination), self._port_functions()
        positions = d.station.positions * [1.0, 1.0, 0.0]
        owner = d.station.port_antennas[rows]
        out = np.empty((rows.size, frame.count, 2), dtype=complex)
        waves = {k: KindWaves(d.kinds[k], d.ground, d.wavenumber, basis=functions[k]) for k in np.unique(d.kind_of[owner])}
        for first in range(0, frame.count, CHUNK_DIRECTIONS):
            chunk = slice(first, min(first + CHUNK_DIRECTIONS, frame.count))
            part = frame.part(chunk)
            for k, wave in waves.items():
                vectors = wave.at(part)
                for a in np.unique(owner[d.kind_of[owner] == k]):
                    mine = np.flatnonzero(owner == a)
                    local = rows[mine] - d.port_offsets[a]
                    turn = phases(part.unit, positions[a : a + 1], d.wavenumber)[0]
                    out[mine, chunk] = turn[:, None] * np.tensordot(responses[a][:, local].T, vectors, axes=1)
        return out

    def beam_currents(self, weights: ArrayLike, termination: Termination = 100.0) -> ComplexArray:
        """Return the currents (N, B) whose field is the coupled beam of the weights (P,) or (B, P)."""
        return self.coupled.currents @ (self._response(termination).T @ self._checked_weights(weights).T)

    def beam(
        self, weights: ArrayLike, theta_rad: ArrayLike, phi_rad: ArrayLike, *, termination: Termination = 100.0
    ) -> ComplexArray:
        """Return the coupled beam: the weighted sum of embedded element patterns, B = sum w_i h_i.

        Parameters
        ----------
        weights : complex (P,) or (B, P)
            Weight of every port; zero leaves a port out, whose antenna still couples.
        theta_rad, phi_rad : array_like
            Directions, as for :meth:`embedded_patterns`.
        termination : optional
            What the ports see [ohm].

        Returns
        -------
        complex128 (D, 2) or (B, D, 2)
            Effective length along theta_hat and phi_hat [m].
        """
        frame = direction_frame(theta_rad, phi_rad)
        self._refuse_mixed_responses(self._checked_weights(weights), termination)
        beams = current_beams(self.discretisation, self.beam_currents(weights, termination), frame, space=self.space)
        return beams if np.ndim(weights) == 2 else beams[0]

    def isolated_beam(
        self, weights: ArrayLike, theta_rad: ArrayLike, phi_rad: ArrayLike, *, termination: Termination = 100.0
    ) -> ComplexArray:
        """Return the isolated beam: the weighted sum of isolated element patterns; see :meth:`beam`."""
        frame = direction_frame(theta_rad, phi_rad)
        table = self._checked_weights(weights)
        self._refuse_mixed_responses(table, termination)
        # A few functions of each antenna, as the coupled beam of a reduced solution has, and for the same reason: speed.
        space = reduced_space(self.discretisation, self._port_functions())
        amounts = np.empty((space.size, len(table)), dtype=complex)
        for a, response in enumerate(self._isolated_responses(termination)):
            amounts[space.of(a)] = response @ table[:, self.discretisation.ports_of(a)].T
        beams = current_beams(self.discretisation, amounts, frame, space=space)
        return beams if np.ndim(weights) == 2 else beams[0]

    def pointing_weights(
        self,
        theta_rad: float,
        phi_rad: float,
        *,
        port: str | None = None,
        antennas: Sequence[str] | None = None,
        delay_step_s: float | None = None,
    ) -> ComplexArray:
        """Return weights exp(-jk r0_hat . r_i) of the ports that take part, zero for the others.

        Parameters
        ----------
        theta_rad, phi_rad : float
            Where to point: zenith angle and azimuth from east towards north [rad].
        port : str, optional
            Name of the port of each antenna that takes part; all ports by default.
        antennas : sequence of str, optional
            Names of the antennas that take part; all by default.
        delay_step_s : float, optional
            Rounds delays to multiples of this [s].

        Returns
        -------
        complex128 (P,)
        """
        names = self.port_names
        if port is not None and not any(n.port == port for n in names):
            msg = f"no antenna has a port {port!r}; there are {', '.join(sorted({n.port for n in names}))}"
            raise ModelRangeError(msg)
        unknown = set(antennas or ()) - {n.antenna for n in names}
        if unknown:
            msg = f"no antenna is called {sorted(unknown)[0]!r}"
            raise ModelRangeError(msg)
        chosen = None if antennas is None else set(antennas)
        amplitude = np.array([float((port is None or n.port == port) and (chosen is None or n.antenna in chosen)) for n in names])
        return pointing_weights(
            self.station.port_positions,
            theta_rad,
            phi_rad,
            self.discretisation.wavenumber,
            amplitudes=amplitude,
            delay_step_s=delay_step_s,
        )

    def _refuse_mixed_responses(self, weights: ComplexArray, termination: Termination) -> None:
        """Refuse beams that add currents of shorted ports [m/ohm] to voltages of others [m]."""
        shorted = reflection_of(termination, self.discretisation.n_ports, self.reference_ohm) == -1.0
        used = weights != 0.0
        mixed = np.any(used[:, shorted], axis=1) & np.any(used[:, ~shorted], axis=1)
        if np.any(mixed):
            msg = (
                "a beam adds shorted ports, whose response is a current, to others, whose response is a voltage; "
                "give shorted ports no weight"
            )
            raise ModelRangeError(msg)

    def _checked_weights(self, weights: ArrayLike) -> ComplexArray:
        table = np.atleast_2d(np.asarray(weights, dtype=complex))
        if table.ndim != 2 or table.shape[1] != self.discretisation.n_ports:
            msg = (
                f"weights: expected shape ({self.discretisation.n_ports},) or (B, {self.discretisation.n_ports}), "
                f"got {np.shape(weights)}"
            )
            raise ModelRangeError(msg)
        if not np.all(np.isfinite(table)):
            msg = "weights: expected finite numbers"
            raise ModelRangeError(msg)
        return table


def antenna_power_gain(effective_length: ComplexArray, admittance: complex | FloatArray, wavelength: float) -> FloatArray:
    """Return the realised gain 4 pi eta |h|^2 Re(Y_T)/lambda^2 of each component of an effective length [m]."""
    from elbowroom.base.constants import IMPEDANCE_OF_VACUUM

    scale = 4.0 * np.pi * IMPEDANCE_OF_VACUUM * np.asarray(np.real(admittance), dtype=float) / wavelength**2
    return np.asarray(scale * np.abs(effective_length) ** 2)
