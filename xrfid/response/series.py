"""What each series of each element would add to the spectrum: the prediction that everything is compared with.

`Prediction` holds what depends on the instrument alone, so that a new estimate of the sample's
composition costs a few milliseconds.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from xrfid.atoms.absorption import ALL_Z, attenuation_table, gas_transmission
from xrfid.atoms.elements import ATOMIC_NUMBER, symbol
from xrfid.atoms.ionisation import subshell_emission
from xrfid.atoms.lines import GROUPS, LineTable, line_table
from xrfid.errors import InputError
from xrfid.instrument import Instrument
from xrfid.response.detector import efficiency
from xrfid.response.excitation import Excitation, excitation
from xrfid.response.sample import LIGHT_MATRIX, Layer, enhancement, escape_depth, sines
from xrfid.response.scatter import Scattered, ScatterModel, compton_energy


@dataclass(frozen=True, slots=True)
class SeriesKey:
    """A series of lines of one element: ``SeriesKey(26, "K")`` is Fe K."""

    z: int
    series: str

    @property
    def element(self) -> str:
        """Symbol of the element."""
        return symbol(self.z)

    def __str__(self) -> str:
        return f"{self.element} {self.series}"


class Prediction:
    """Intensities of all lines in reach of one instrument.

    Parameters
    ----------
    instrument : Instrument
    end_kev : float, optional
        Voltage to assume when the instrument states no source.

    Attributes
    ----------
    source : Excitation
    keys : tuple of SeriesKey
        The series in reach, i.e. with an edge below the highest photon energy.
    line_energy_kev, line_rate : ndarray, shape (n_lines,)
    line_series, line_group, line_z : ndarray of int, shape (n_lines,)
        Index into `keys`; index into `GROUPS`; atomic number.
    line_efficiency : ndarray, shape (n_lines,)
        Path and detector, 0 to 1.

    Raises
    ------
    InputError
        If the anode or a stray element is no element.
    """

    def __init__(self, instrument: Instrument, end_kev: float | None = None) -> None:
        for name in instrument.stray.elements:
            if name not in ATOMIC_NUMBER:
                raise InputError("stray.elements", f'"{name}" is no element symbol', 'write for example "Zr"')
        self.instrument = instrument
        self.source: Excitation = excitation(instrument, end_kev)
        self._sines = sines(instrument.geometry)
        table = line_table()
        z = np.unique(table.z)
        emission = subshell_emission(z, self.source.energy_kev) * self.source.photons
        row = np.searchsorted(z, table.z)
        alive = emission.sum(axis=2)[row, table.subshell] > 0
        alive &= table.energy_kev < self.source.end_kev
        self._keep_lines(table, np.flatnonzero(alive))
        pairs = np.unique(row[alive] * 16 + table.subshell[alive])
        self._pair = np.searchsorted(pairs, row[alive] * 16 + table.subshell[alive])
        self._emission = emission[pairs // 16, pairs % 16]
        self._pair_z, self._pair_subshell = z[pairs // 16], pairs % 16
        self._mu_in = attenuation_table(self.source.energy_kev)
        self._mu_line = attenuation_table(self.line_energy_kev)
        path, detector = instrument.path, instrument.detector
        self.line_efficiency = gas_transmission(path.atmosphere, path.length_mm, self.line_energy_kev) * efficiency(
            detector, self.line_energy_kev
        )
        self._scatter: ScatterModel | None = None
        self._excited: tuple[tuple[int, ...], NDArray[np.float64]] | None = None

    def _keep_lines(self, table: LineTable, rows: NDArray[np.intp]) -> None:
        used = np.unique(table.series[rows])
        self.keys = tuple(SeriesKey(*table.series_keys[i]) for i in used)
        self.line_series = np.searchsorted(used, table.series[rows])
        self.line_energy_kev = table.energy_kev[rows]
        self.line_rate = table.rate[rows]
        self.line_group = table.group[rows]
        self.line_z = table.z[rows]
        self.line_width_kev = table.width_kev[rows]
        self.line_names = tuple(table.names[i] for i in rows)
        tolerance = np.array([g.tolerance for g in GROUPS])
        self.line_tolerance = tolerance[self.line_group]

    def line_intensities(
        self, fractions: NDArray[np.float64], enhanced: bool = True, rows: NDArray[np.intp] | None = None
    ) -> NDArray[np.float64]:
        """Photons recorded in each line per unit mass fraction of its element, thick sample.

        Parameters
        ----------
        fractions : ndarray, shape (92,)
            Mass fractions that absorb (and, if `enhanced`, excite each other).
        enhanced : bool
            Add the secondary fluorescence of the elements present.
        rows : ndarray of int, optional
            Only these lines; all if not given.

        Returns
        -------
        ndarray, shape (n_lines,)
            Relative; the same unit for all lines and for `scattered`.
        """
        rows = np.arange(self.line_z.size) if rows is None else rows
        s1, s2 = self._sines
        a = fractions @ self._mu_in / s1
        b = fractions @ self._mu_line[:, rows] / s2
        made = np.einsum("le,le->l", escape_depth(a, b, np.inf), self._emission[self._pair[rows]])
        if enhanced:
            made = made + self._secondary(fractions, a, b, rows)
        return np.asarray(made * self.line_rate[rows] / (4.0 * np.pi) * self.line_efficiency[rows])

    def _secondary(
        self,
        fractions: NDArray[np.float64],
        a: NDArray[np.float64],
        b: NDArray[np.float64],
        rows: NDArray[np.intp],
    ) -> NDArray[np.float64]:
        """Secondary fluorescence per unit mass fraction and rate, excited by the strong lines of the sample."""
        strength = fractions[self.line_z - 1] * self.line_rate * self._emission[self._pair].sum(axis=1)
        strong = np.flatnonzero(strength > 0.02 * max(float(strength.max(initial=0.0)), 1e-300))
        strong = strong[self.line_energy_kev[strong] > 1.5]
        out = np.zeros(rows.size)
        if not strong.size:
            return out
        flux = (fractions[self.line_z[strong] - 1] * self.line_rate[strong])[:, None]
        flux = flux * self._emission[self._pair[strong]]
        production = self._excited_by(tuple(map(int, strong)))[self._pair[rows]]
        excited = np.flatnonzero(production.any(axis=1))
        mu = fractions @ self._mu_line[:, strong]
        out[excited] = enhancement(production[excited], flux, a, mu, b[excited])
        return out

    def _excited_by(self, lines: tuple[int, ...]) -> NDArray[np.float64]:
        """Emission of every sub-shell when excited by the sample's own lines, shape (n_pairs, n_lines)."""
        if self._excited is None or self._excited[0] != lines:
            z = np.unique(self._pair_z)
            emitted = subshell_emission(z, self.line_energy_kev[list(lines)])
            self._excited = (lines, emitted[np.searchsorted(z, self._pair_z), self._pair_subshell])
        return self._excited[1]

    def layered_intensities(self, coating: Layer, substrate: Layer | None) -> tuple[NDArray[np.float64], ...]:
        """Photons in each line from a coating and from the substrate below it (primary only).

        Returns
        -------
        coating, substrate : ndarray, shape (n_lines,)
            Per unit mass fraction in the respective layer.
        """
        s1, s2 = self._sines
        emission = self._emission[self._pair]
        a, b = coating.fractions @ self._mu_in / s1, coating.fractions @ self._mu_line / s2
        above = np.einsum("le,le->l", escape_depth(a, b, coating.g_cm2), emission)
        unit = self.line_rate * self.line_efficiency / (4.0 * np.pi)
        if substrate is None:
            return above * unit, np.zeros_like(above)
        below_a, below_b = substrate.fractions @ self._mu_in / s1, substrate.fractions @ self._mu_line / s2
        veiled = np.exp(-(a[None, :] + b[:, None]) * coating.g_cm2)
        depth = escape_depth(below_a, below_b, substrate.g_cm2)
        return above * unit, np.einsum("le,le,le->l", depth, veiled, emission) * unit

    def scattered(self, fractions: NDArray[np.float64]) -> Scattered:
        """Photons of the source scattered by a thick sample and recorded; same unit as the lines."""
        if self._scatter is None:
            self._scatter = ScatterModel(self.source, self.instrument.geometry.scatter_deg, self._sines)
            self._scatter_recorded = (
                self.recorded(self.source.energy_kev),
                self.recorded(compton_energy(self.source.energy_kev, self.instrument.geometry.scatter_deg)),
            )
        raw = self._scatter(fractions)
        coherent, incoherent = self._scatter_recorded
        return Scattered(raw.coherent_kev, raw.coherent * coherent, raw.incoherent_kev, raw.incoherent * incoherent)

    def recorded(self, energy_kev: NDArray[np.float64]) -> NDArray[np.float64]:
        """Share of photons leaving the sample towards the detector that is recorded."""
        path = self.instrument.path
        return gas_transmission(path.atmosphere, path.length_mm, energy_kev) * efficiency(
            self.instrument.detector, energy_kev
        )

    def light_matrix_only(self) -> NDArray[np.float64]:
        """Mass fractions (92,) of the light matrix alone: the first guess when nothing is known."""
        out = np.zeros(ALL_Z.size)
        for z, w in LIGHT_MATRIX.items():
            out[z - 1] = w
        return out
