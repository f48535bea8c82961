"""Departures of real photospheres from blackbodies, band by band, and the file that holds them.

A star's flux density in band b is ``ln f_b = ln Ω + g_b(T, A_V) + ln D_b(T) + Σ_k Λ_bk(T) z_k + e_b``: g of the
blackbody of its effective temperature, D the mean departure of the reference stars, the factors z_k ~ N(0, 1) what
makes one star odd in all bands together, and e_b ~ N(0, u_b²) what is left. The reference stars themselves scatter
about the scale that their colours define: in temperature by τ(T) in ln T at the same luminosity, and in luminosity by
γ(T) in ln L at the same temperature.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass, field, replace
from itertools import repeat
from pathlib import Path
from typing import Any, Literal, NamedTuple, get_args

import numpy as np
from numpy.typing import ArrayLike, NDArray

from starkiln.errors import SettingsError
from starkiln.physics.passbands import Passband

FloatArray = NDArray[np.float64]
Kind = Literal["sequence", "stars", "chain", "fallback"]

LN_TEFF_STEP = math.log(100.0) / 128.0
LN_TEFF_NODES: FloatArray = math.log(1_000.0) + LN_TEFF_STEP * np.arange(129.0)
MAX_FACTORS = 2

BUILTIN_PATH = Path(__file__).with_name("builtin_departures.ecsv")

_FALLBACK: Kind = "fallback"
_OFF_SCALE = ("temperature_scatter", "luminosity_scatter")
_HOLD_WIDTH = 0.03  # in ln T: how soon the slope of ln D dies outside its range
_GROWTH = 1.0  # of the scatter per unit of ln T outside the range; departures have slopes of this order
_DECIMALS = 5
_SLACK = 1e-5  # in ln T: a node at the very end of a range, whose temperature is rounded, is in it


class DepartureMismatch(SettingsError):
    """A passband is not the one that the departures were learnt with."""


class DeparturesAt(NamedTuple):
    """Departures at n temperatures: (n_bands, n); loading is (n_factors, n_bands, n), the last two (n,)."""

    ln_d: FloatArray
    loading: FloatArray
    scatter: FloatArray
    temperature_scatter: FloatArray
    luminosity_scatter: FloatArray


@dataclass(frozen=True, eq=False)
class Departures:
    """Departures of some bands on a uniform grid of ln T.

    Attributes
    ----------
    bands, digests, kind, source
        Per band: its name, its :meth:`Passband.digest`, what its curve rests on ("sequence" or "stars": learnt from
        reference stars in this band; "chain": through other bands; "fallback": a guess with a wide error), and in
        words.
    pivot_um
        (n_bands,): pivot wavelengths [um].
    range_k
        (n_bands, 2): the temperatures [K] in which a band's departure holds.
    ln_teff
        (n_nodes,): nodes, uniform in ln(T / K).
    ln_d, scatter
        (n_bands, n_nodes): ln D and u. Outside a band's range ln D is held and u grows.
    loading
        (n_factors, n_bands, n_nodes): Λ.
    factors
        What each factor stands for.
    temperature_scatter, luminosity_scatter
        (n_nodes,): τ, scatter in ln T of the reference stars about their scale at their luminosity, and γ, in ln L at
        their temperature. No band can show either, so they widen a posterior as they are.
    provenance
        What the departures were learnt from, for people and for records of a run.
    origin
        The file they were read from.
    """

    bands: tuple[str, ...]
    digests: tuple[str, ...]
    kind: tuple[Kind, ...]
    source: tuple[str, ...]
    pivot_um: FloatArray
    range_k: FloatArray
    ln_d: FloatArray
    loading: FloatArray
    scatter: FloatArray
    factors: tuple[str, ...]
    provenance: dict[str, Any] = field(default_factory=dict)
    ln_teff: FloatArray = field(default_factory=LN_TEFF_NODES.copy)
    temperature_scatter: FloatArray = field(default_factory=lambda: np.zeros_like(LN_TEFF_NODES))
    luminosity_scatter: FloatArray = field(default_factory=lambda: np.zeros_like(LN_TEFF_NODES))
    origin: str = ""

    @property
    def served(self) -> NDArray[np.bool_]:
        """(n_bands,): whether a band's curve rests on stars, directly or through a chain."""
        return np.array([kind != "fallback" for kind in self.kind], dtype=bool)

    def at(self, teff_k: ArrayLike) -> DeparturesAt:
        """Return the departures at temperatures [K], cubic in ln T between the nodes.

        Beyond the first and the last node they stay at what they are there, but for the scatter, which grows on.
        """
        from scipy.interpolate import CubicSpline

        ln_teff = np.log(np.atleast_1d(np.asarray(teff_k, dtype=np.float64)))
        inside = np.clip(ln_teff, self.ln_teff[0], self.ln_teff[-1])
        ln_d, loading, ln_scatter = (
            CubicSpline(self.ln_teff, values, axis=-1)(inside)
            for values in (self.ln_d, self.loading, np.log(self.scatter))
        )
        scatter = np.hypot(np.exp(ln_scatter), _GROWTH * (ln_teff - inside))
        tau, gamma = (
            np.interp(inside, self.ln_teff, values) for values in (self.temperature_scatter, self.luminosity_scatter)
        )
        return DeparturesAt(ln_d, loading, scatter, tau, gamma)

    def holds(self, teff_k: ArrayLike) -> NDArray[np.bool_]:
        """Return whether temperatures [K] lie in the range of each band, of shape (n_bands, n)."""
        teff_k = np.atleast_1d(np.asarray(teff_k, dtype=np.float64))
        return (teff_k >= self.range_k[:, :1]) & (teff_k <= self.range_k[:, 1:])

    def for_bands(self, passbands: Sequence[Passband]) -> Departures:
        """Return the departures of the given passbands, in their order.

        A passband that has none gets a fallback: ln D from its neighbours in wavelength, and an error of 0.20 in the
        ultraviolet and optical, 0.10 in J and H, 0.05 from Ks on. Half of its variance is a factor that all
        fallback bands share.

        Raises
        ------
        DepartureMismatch
            If a passband has the name of one in here, but another curve, detector or zero point.
        """
        for passband in passbands:
            self._refuse_other_curve(passband)
        known = {band: place for place, band in enumerate(self.bands)}
        missing = {band.name: band for band in passbands if band.name not in known}
        whole = self._with_fallbacks(list(missing.values())) if missing else self
        place_of = {band: place for place, band in enumerate(whole.bands)}
        return whole._rows([place_of[band.name] for band in passbands])

    def _refuse_other_curve(self, passband: Passband) -> None:
        if passband.name not in self.bands:
            return
        learnt, given = self.digests[self.bands.index(passband.name)], passband.digest()
        if learnt != given:
            raise DepartureMismatch(
                f"passband {passband.name!r}: {self.origin or 'these departures'} holds departures learnt with another "
                f"curve, detector or zero point (digest {learnt[:12]}, not {given[:12]}); learn them again with "
                "`starkiln calibrate`, or give this passband another name"
            )

    def _rows(self, rows: list[int]) -> Departures:
        return replace(
            self,
            bands=tuple(self.bands[row] for row in rows),
            digests=tuple(self.digests[row] for row in rows),
            kind=tuple(self.kind[row] for row in rows),
            source=tuple(self.source[row] for row in rows),
            pivot_um=self.pivot_um[rows],
            range_k=self.range_k[rows],
            ln_d=self.ln_d[rows],
            loading=self.loading[:, rows],
            scatter=self.scatter[rows],
        )

    def _with_fallbacks(self, passbands: list[Passband]) -> Departures:
        """Add bands that have no departures here, and the factor that they share."""
        pivot_um = np.array([passband.pivot_um for passband in passbands])
        left, right, weight = _neighbours(self.pivot_um, pivot_um)
        half_variance = np.array([fallback_error(pivot) for pivot in pivot_um]) * math.sqrt(0.5)
        n_factors = min(len(self.loading) + 1, MAX_FACTORS)
        loading = np.zeros((n_factors, len(self.bands) + len(passbands), len(self.ln_teff)))
        loading[: len(self.loading), : len(self.bands)] = self.loading
        loading[-1, len(self.bands) :] = half_variance[:, np.newaxis]
        low_k = np.maximum(self.range_k[left, 0], self.range_k[right, 0])
        high_k = np.minimum(self.range_k[left, 1], self.range_k[right, 1])

        def mixed(values: FloatArray) -> FloatArray:
            return (1.0 - weight) * values[left] + weight * values[right]

        return replace(
            self,
            bands=self.bands + tuple(passband.name for passband in passbands),
            digests=self.digests + tuple(passband.digest() for passband in passbands),
            kind=(*self.kind, *repeat(_FALLBACK, len(passbands))),
            source=self.source
            + tuple(f"a guess between {self.bands[i]} and {self.bands[j]}" for i, j in zip(left, right, strict=True)),
            pivot_um=np.append(self.pivot_um, pivot_um),
            range_k=np.concatenate([self.range_k, np.stack([low_k, high_k], axis=1)]),
            ln_d=np.concatenate([self.ln_d, mixed(self.ln_d)]),
            loading=loading,
            scatter=np.concatenate([self.scatter, np.hypot(half_variance[:, np.newaxis], mixed(self.scatter))]),
            factors=(*self.factors, "fallback")[:n_factors],
        )


def fallback_error(pivot_um: float) -> float:
    """Return the error of ln D of a band without departures: common practice, no source."""
    if pivot_um < 1.0:
        return 0.20
    return 0.10 if pivot_um < 1.9 else 0.05


def _neighbours(known_um: FloatArray, wanted_um: FloatArray) -> tuple[NDArray[np.intp], NDArray[np.intp], FloatArray]:
    """Return the bands on both sides of each wavelength, and the weight of the right one; at the ends the last."""
    order = np.argsort(known_um, kind="stable")
    place = np.searchsorted(known_um[order], wanted_um)
    left, right = order[np.maximum(place - 1, 0)], order[np.minimum(place, len(order) - 1)]
    span = np.log(known_um[right] / known_um[left])
    distance = np.log(wanted_um / known_um[left])
    weight = np.divide(distance, span, out=np.zeros_like(span), where=span > 0.0)
    return left, right, weight[:, np.newaxis]


def extended(values: FloatArray, inside: NDArray[np.bool_]) -> FloatArray:
    """Hold ln D, or a loading, beyond the stretch of nodes where it is known: its slope dies out within 0.03 in ln T.

    ``values`` (n_nodes,) counts where ``inside`` is true, which must be one stretch of the standard nodes.
    """
    first, last = _ends(inside)
    nodes = LN_TEFF_NODES
    held = values.copy()
    for edge, outwards, outside in ((first, -1, slice(None, first)), (last, 1, slice(last + 1, None))):
        slope = (values[edge] - values[edge - outwards]) / LN_TEFF_STEP
        distance = np.abs(nodes[outside] - nodes[edge])
        held[outside] = values[edge] + slope * _HOLD_WIDTH * -np.expm1(-distance / _HOLD_WIDTH)
    return held


def extended_scatter(scatter: FloatArray, inside: NDArray[np.bool_]) -> FloatArray:
    """Let a scatter grow beyond the stretch of nodes where it is known: by 1 per unit of ln T, in quadrature."""
    first, last = _ends(inside)
    nearest = np.clip(np.arange(len(scatter)), first, last)
    return np.hypot(scatter[nearest], _GROWTH * (LN_TEFF_NODES - LN_TEFF_NODES[nearest]))


def _ends(inside: NDArray[np.bool_]) -> tuple[int, int]:
    places = np.flatnonzero(inside)
    if len(places) < 2 or len(places) != places[-1] - places[0] + 1:
        raise ValueError("a departure is known at two nodes or more, without a gap")
    return int(places[0]), int(places[-1])


def inside_range(range_k: ArrayLike) -> NDArray[np.bool_]:
    """Return which of the standard nodes lie in a range of temperatures [K], with a hair to spare."""
    low, high = np.log(np.asarray(range_k, dtype=np.float64))
    ln_teff = LN_TEFF_NODES
    return (ln_teff >= low - _SLACK) & (ln_teff <= high + _SLACK)


def write_departures(departures: Departures, path: str | Path) -> None:
    """Write departures as an ECSV table: a row per band and node in its range, the facts of each band above.

    Raises
    ------
    ValueError
        If the departures are not on the standard nodes.
    """
    from astropy.table import Table

    if not np.array_equal(departures.ln_teff, LN_TEFF_NODES):
        raise ValueError("departures are written on the standard nodes only")
    inside = np.array([inside_range(range_k) for range_k in departures.range_k])
    band, node = np.nonzero(inside)
    columns = {
        "band": [departures.bands[place] for place in band],
        "teff_k": np.round(np.exp(LN_TEFF_NODES[node]), 2),
        "ln_d": departures.ln_d[inside],
        **{f"loading_{k + 1}": loading[inside] for k, loading in enumerate(departures.loading)},
        "scatter": departures.scatter[inside],
    }
    meta = {
        "content": "departures of photospheres from blackbodies",
        "format": 1,
        "factors": list(departures.factors),
        **_off_scale(departures),
        "provenance": departures.provenance,
        "bands": [_facts(departures, place) for place in range(len(departures.bands))],
    }
    table = Table(columns, meta=meta)
    table["teff_k"].unit = "K"
    table["teff_k"].info.format = ".2f"
    for name in table.colnames[2:]:
        table[name] = np.round(table[name], _DECIMALS) + 0.0  # no minus zero
        table[name].info.format = f".{_DECIMALS}f"
    table["ln_d"].description = "ln of observed flux over that of a blackbody of the same T and R/d"
    table["scatter"].description = "scatter of one band that no factor explains, in ln flux"
    table.write(path, format="ascii.ecsv", overwrite=True)


def _off_scale(departures: Departures) -> dict[str, list[float]]:
    """Return the scatters about the scale at the nodes, nothing where there are none."""
    scatters = {name: getattr(departures, name) for name in _OFF_SCALE}
    return {name: [round(float(v), _DECIMALS) for v in values] for name, values in scatters.items() if values.any()}


def _facts(departures: Departures, place: int) -> dict[str, Any]:
    low_k, high_k = departures.range_k[place]
    return {
        "name": departures.bands[place],
        "kind": departures.kind[place],
        "source": departures.source[place],
        "pivot_um": round(float(departures.pivot_um[place]), 5),
        "teff_min_k": round(float(low_k), 2),
        "teff_max_k": round(float(high_k), 2),
        "digest": departures.digests[place],
    }


def read_departures(path: str | Path) -> Departures:
    """Return the departures in an ECSV file that :func:`write_departures` wrote.

    Raises
    ------
    SettingsError
        If the file cannot be read or is not such a table; the message names what is wrong.
    """
    from astropy.table import Table

    path = Path(path)
    try:
        table = Table.read(path, format="ascii.ecsv")
    except FileNotFoundError:
        raise SettingsError(f"{path}: no such file of departures") from None
    except Exception as error:  # the reader raises whatever its parsers do
        reason = (str(error).splitlines() or [type(error).__name__])[0]
        raise SettingsError(f"{path}: cannot be read as a table of departures: {reason}") from error
    _check_form(table, path)
    facts = table.meta["bands"]
    factors = tuple(table.meta["factors"])
    columns = ["ln_d", *(f"loading_{k + 1}" for k in range(len(factors))), "scatter"]
    values = np.stack([_on_nodes(table, fact, columns, path) for fact in facts], axis=1)
    return Departures(
        bands=tuple(fact["name"] for fact in facts),
        digests=tuple(str(fact["digest"]) for fact in facts),
        kind=tuple(fact["kind"] for fact in facts),
        source=tuple(str(fact["source"]) for fact in facts),
        pivot_um=np.array([float(fact["pivot_um"]) for fact in facts]),
        range_k=np.array([[float(fact["teff_min_k"]), float(fact["teff_max_k"])] for fact in facts]),
        ln_d=values[0],
        loading=values[1:-1],
        scatter=values[-1],
        factors=factors,
        provenance=dict(table.meta["provenance"]),
        **{name: _at_all_nodes(table, name, path) for name in _OFF_SCALE},
        origin=str(path),
    )


def builtin_departures() -> Departures:
    """Return the built-in departures."""
    return read_departures(BUILTIN_PATH)


def _check_form(table: Any, path: Path) -> None:
    needed_meta, needed_columns = {"format", "factors", "provenance", "bands"}, {"band", "teff_k", "ln_d", "scatter"}
    missing = sorted(needed_meta - set(table.meta)) + sorted(needed_columns - set(table.colnames))
    if missing:
        raise SettingsError(f"{path}: not a table of departures; it lacks {', '.join(missing)}")
    if table.meta["format"] != 1:
        raise SettingsError(f"{path}: format {table.meta['format']} of departures is not known here; this reads 1")
    needed_facts = {"name", "kind", "source", "pivot_um", "teff_min_k", "teff_max_k", "digest"}
    for place, facts in enumerate(table.meta["bands"]):
        lacking = sorted(needed_facts - set(facts))
        if lacking:
            raise SettingsError(f"{path}: band {facts.get('name', place)!r} lacks {', '.join(lacking)}")
        if facts["kind"] not in get_args(Kind):
            raise SettingsError(
                f"{path}: band {facts['name']!r} is of kind {facts['kind']!r}; known are {', '.join(get_args(Kind))}"
            )
    if len(table.meta["factors"]) > MAX_FACTORS:
        raise SettingsError(f"{path}: {len(table.meta['factors'])} factors; at most {MAX_FACTORS} are used")


def _at_all_nodes(table: Any, name: str, path: Path) -> FloatArray:
    scatter = np.array(table.meta.get(name, np.zeros_like(LN_TEFF_NODES)), dtype=np.float64)
    if scatter.shape != LN_TEFF_NODES.shape or not np.all(np.isfinite(scatter) & (scatter >= 0.0)):
        raise SettingsError(f"{path}: {name} needs {len(LN_TEFF_NODES)} numbers, one for each node")
    return scatter


def _on_nodes(table: Any, facts: dict[str, Any], columns: list[str], path: Path) -> FloatArray:
    """Return one band's columns on all nodes, (n_columns, n_nodes), extended beyond its range."""
    band = facts["name"]
    rows = table[table["band"] == band]
    position = (np.log(np.asarray(rows["teff_k"], dtype=np.float64)) - LN_TEFF_NODES[0]) / LN_TEFF_STEP
    node = np.rint(position).astype(np.int64)
    inside = inside_range([facts["teff_min_k"], facts["teff_max_k"]])
    if not np.array_equal(node, np.flatnonzero(inside)) or np.any(np.abs(position - node) > 1e-2):
        raise SettingsError(f"{path}: band {band!r}: its rows are not the nodes of its range, in rising order")
    values = np.zeros((len(columns), len(LN_TEFF_NODES)))
    for column, name in enumerate(columns):
        known = np.asarray(rows[name], dtype=np.float64)
        if not np.all(np.isfinite(known)) or (name == "scatter" and np.any(known <= 0.0)):
            raise SettingsError(f"{path}: band {band!r}, column {name!r}: holds a value that cannot be used")
        values[column, inside] = known
        extend = extended_scatter if name == "scatter" else extended
        values[column] = extend(values[column], inside)
    return values
