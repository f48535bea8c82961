"""The built-in departures: ``python -m starkiln.calibration.builtin REFERENCE_DIR OUT.ecsv``.

REFERENCE_DIR holds the published tables nearby_dwarfs_a.csv and dwarf_locus_ugrizJHK_2014.csv; the mean dwarf
sequence comes from the ``MeanStars`` package. The same tables give the same bytes.
"""

from __future__ import annotations

import sys
from dataclasses import dataclass, field, replace
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

from starkiln.calibration import dwarfs as nearby
from starkiln.calibration import relations, sequence
from starkiln.calibration.curves import at_nodes, choose_smoothness, fit_curve
from starkiln.calibration.dwarfs import Dwarfs, read_dwarfs
from starkiln.calibration.factors import Factors, learn_factors
from starkiln.calibration.learn import blackbody_ln_flux, departure_points, ln_flux_jy, ln_omega, temperature_slope
from starkiln.calibration.sequence import MeanSequence, meanstars_path, read_mean_sequence
from starkiln.calibration.spectral import transfer
from starkiln.physics.departures import (
    LN_TEFF_NODES,
    LN_TEFF_STEP,
    Departures,
    Kind,
    extended,
    extended_scatter,
    write_departures,
)
from starkiln.physics.extinction import extinction_ratio
from starkiln.physics.passbands import Passband, builtin_names, load_passband

FloatArray = NDArray[np.float64]
BoolArray = NDArray[np.bool_]

TEFF_NODES_K: FloatArray = np.exp(LN_TEFF_NODES)

_POINT_ERROR = 0.02  # of a row of the sequence, or of a mean of dwarfs: rounding of T and of colours
_LATE_K, _LATE_POINT_ERROR = 3_000.0, 0.05  # cooler rows of the sequence rest on few stars each
_EARLY_K, _EARLY_POINT_ERROR = 9_500.0, 0.08  # hotter ones likewise; their R and T jump from type to type
_NUV_POINT_ERROR = 0.1
_MAD_TO_SIGMA = 1.4826
# Of the curve of dwarfs, where the sequence has 1: they were measured in these bands, its colours are compiled.
_DWARFS_WEIGHT = 2.0
_LEAST_STARS = 4  # that a mean of dwarfs of one published temperature needs
_COOLEST_MEAN_K = 2_800.0  # cooler dwarfs are few, and lack B and V: the sequence alone is coherent there
_WIDEST_GAP = 0.2  # in ln T, that a curve crosses between two points
_TAPER = 0.08  # in ln T: within this from the end of its range one scale gives way to the other
_FEWEST_LATE = 2
_LEAST_POINTS = 5  # that a smooth curve needs
_WARM_K = 4_300.0  # above, relations of SDSS with UBVRcIc rest on many stars
_HOT_K = 10_000.0
_COOLEST_RELATION_K = 2_700.0
_COOLEST_CHAIN_K = 2_300.0
_FAR_SYSTEMS = ("galex", "wise")  # no band between them and the others is asked for
_NEAR = 0.35  # in ln wavelength: bands within this tell about a band between them
_JOHNSON = ("johnson_u", "johnson_b", "johnson_v", "cousins_r", "cousins_i")
NUV_RELATION_K = (4_400.0, 6_700.0)
# Vega in GALEX NUV: its CALSPEC spectrum stis_011 in the passband, 1.64 mag (AB), with an angular diameter of 3.28 mas
# (from memory: Monnier et al. 2012, ApJ 761, L3) against a blackbody of its effective temperature.
VEGA_TEFF_K, VEGA_NUV_LN_D = 9_550.0, -0.14
LOCUS = "the locus of Davenport et al. 2014, MNRAS 440, 3430"
_COOL_K = (4_300.0, 4_900.0)  # individual stars are at hand up to the first, and count no more at the second
_HOT_RANGE_K = (9_000.0, 11_000.0)
_REDDENING_MAG = 0.03  # of A_V, above
# Scatter of ln T of warm and of hot stars about the scale: assumed. Temperatures of FGK dwarfs from different
# methods agree to about one per cent (common practice, no source).
_WARM_SHIFT, _HOT_SHIFT = 0.01, 0.02
_WARM_LUMINOSITY, _HOT_LUMINOSITY = 0.02, 0.04  # of ln L, likewise: twice that of ln T, as for the cool dwarfs
_OF_PHOTOSPHERE_UM = 0.3  # bluer bands are of the chromosphere, and have no part in the factors
# Metallicity at fixed T, ln flux for +0.2 dex, the scatter of nearby dwarfs: B from Casagrande et al. 2010, A&A 512,
# A54, table 4, near the Sun; U from the ultraviolet excess of metal-poor dwarfs, 0.25 mag per dex in U-B (from memory).
_METALLICITY = {"johnson_b": -0.018, "johnson_u": -0.064, "sdss_u": -0.064, "decam_u": -0.04, "rubin_u": -0.05}
_FACTOR_SAMPLE_K = 2_700.0  # coolest dwarf of the factor analysis: cooler ones are few, and differ between scales
_WARM_SCATTER = 0.015  # of a warm star in a band, beside the factor: the precision of photometry (common practice)
_ULTRAVIOLET_SCATTER = {  # beside the factor, for cool and for warm stars: of the dwarfs in GALEX, else assumed
    "galex_fuv": (1.2, 1.5),
    "galex_nuv": (0.6, 0.3),
    "johnson_u": (0.10, 0.04),
    "sdss_u": (0.15, 0.05),
    "decam_u": (0.20, 0.10),
    "rubin_u": (0.20, 0.08),
}
_CHAIN_SCATTER = 0.02  # of the published relations, about their own
_NARROW = ("johnson_b", "johnson_v", "sdss_r", "gaia_dr2_rp", "2mass_j", "2mass_h", "2mass_ks", "wise_w1", "wise_w2")
_UNTRUSTED = {"sdss_u"}  # bright M dwarfs are 1 mag too faint there against the locus of faint ones


@dataclass(frozen=True, eq=False)
class Locus:
    """The locus of dwarfs in SDSS colours: (n,) each, g-i rising."""

    g_i: FloatArray
    u_g: FloatArray
    i_z: FloatArray

    def u_and_z(self, g: FloatArray, i: FloatArray) -> relations.Magnitudes:
        """Return u and z of stars on the locus from g and i, NaN off its ends."""
        u_g, i_z = (np.interp(g - i, self.g_i, values, left=np.nan, right=np.nan) for values in (self.u_g, self.i_z))
        return {"u": g + u_g, "z": i - i_z}


def read_locus(path: Path) -> Locus:
    """Return the locus of dwarfs from its table."""
    from astropy.table import Table

    table = Table.read(path, format="ascii.csv")
    return Locus(*(np.asarray(table[name], dtype=np.float64) for name in ("g-i", "u-g", "i-z")))


@dataclass
class Curves:
    """Curves of ln D at the nodes by band, where they are known, and what they rest on.

    ``of_dwarfs`` and ``of_sequence`` are the curves of either alone, NaN where it has none.
    """

    ln_d: dict[str, FloatArray] = field(default_factory=dict)
    inside: dict[str, BoolArray] = field(default_factory=dict)
    kind: dict[str, Kind] = field(default_factory=dict)
    source: dict[str, str] = field(default_factory=dict)
    of_dwarfs: dict[str, FloatArray] = field(default_factory=dict)
    of_sequence: dict[str, FloatArray] = field(default_factory=dict)

    def add(self, band: str, ln_d: FloatArray, inside: BoolArray, kind: Kind, source: str) -> None:
        """Add a band, or replace it; gaps between its known stretches are bridged straight."""
        places = np.flatnonzero(inside)
        whole = np.zeros_like(inside)
        whole[places[0] : places[-1] + 1] = True
        self.ln_d[band] = np.interp(LN_TEFF_NODES, LN_TEFF_NODES[inside], ln_d[inside])
        self.inside[band], self.kind[band], self.source[band] = whole, kind, source

    def known(self, band: str) -> FloatArray:
        """Return ln D at the nodes, NaN outside the band's range."""
        return np.where(self.inside[band], self.ln_d[band], np.nan)


def builtin_curves(rows: MeanSequence, dwarfs: Dwarfs, locus: Locus) -> Curves:
    """Return the curves of all built-in bands that stars can be found for."""
    curves = Curves()
    _add_references(curves, rows, dwarfs)
    _add_sdss_u_z(curves, rows, locus)
    _add_near_ultraviolet(curves, rows, dwarfs)
    _add_relations(curves)
    _add_transferred(curves)
    return curves


def _add_references(curves: Curves, rows: MeanSequence, dwarfs: Dwarfs) -> None:
    """Add the bands that the sequence or the dwarfs have, and g, r, i of SDSS from UBVRcIc of the sequence."""
    sdss = _sdss_of_sequence(rows)
    late = _late_sdss(rows, dwarfs)
    known = {band: np.where(np.isfinite(sdss[band]), sdss[band], late[band]) for band in "gri"}
    magnitude = rows.magnitude | {f"sdss_{band}": values for band, values in known.items()}
    points = magnitude_points(rows, magnitude)
    _average_gaia(rows, list(magnitude), points)
    of_rows = _smooth(rows.teff_k, points, _row_errors(rows, points), list(magnitude))
    teff_k, means, errors = dwarf_means(dwarfs)
    of_dwarfs = _smooth(teff_k, means, errors, list(dwarfs.passbands))
    for band in dict.fromkeys([*of_rows, *of_dwarfs]):
        if band in _UNTRUSTED:
            continue
        weighted = ((of_rows, 1.0), (of_dwarfs, _DWARFS_WEIGHT))
        ln_d, inside = _blend([(*found[band], weight) for found, weight in weighted if band in found])
        sources = ["mean dwarf sequence"] * (band in of_rows) + ["nearby dwarfs"] * (band in of_dwarfs)
        kind: Kind = "sequence" if band in of_rows else "stars"
        if band.startswith("sdss"):
            kind, sources[0] = "chain", f"UBVRcIc of the sequence through {relations.JESTER} and {relations.TONRY}"
            sources[0] += f"; below {_COOLEST_RELATION_K:.0f} K J of the sequence and the dwarfs' colours"
        elif band.startswith("gaia"):
            sources[0] += f", averaged with its V and Ic through {relations.GAIA_DR3}"
        curves.add(band, ln_d, inside, kind, "; ".join(sources))
    for found, alone in ((of_rows, curves.of_sequence), (of_dwarfs, curves.of_dwarfs)):
        alone |= {band: np.where(inside, curve, np.nan) for band, (curve, inside) in found.items()}


def _average_gaia(rows: MeanSequence, bands: list[str], points: FloatArray) -> None:
    """Take the mean of the sequence's own Gaia DR2 colours, which jump, and of V and Ic through the relation of DR3.

    The departures of a band hardly differ between the two editions, whose curves and zero points are accounted for.
    """
    related = relations.gaia_dr3_from_johnson(rows.magnitude["johnson_v"], rows.magnitude["cousins_i"])
    of_relation = magnitude_points(rows, {f"gaia_dr3_{band}": values for band, values in related.items()})
    for place, band in enumerate(related):
        column = bands.index(f"gaia_dr2_{band}")
        both = np.isfinite(of_relation[:, place]) & np.isfinite(points[:, column])
        points[both, column] = 0.5 * (points[both, column] + of_relation[both, place])
        hot = np.isnan(points[:, column]) & (rows.teff_k > _HOT_K)
        points[hot, column] = of_relation[hot, place]


def magnitude_points(rows: MeanSequence, magnitude: dict[str, FloatArray]) -> FloatArray:
    """Return ln D of the rows of the sequence in each band of ``magnitude``, (n_rows, n_bands)."""
    passbands = _passbands(list(magnitude))
    absolute = np.stack(list(magnitude.values()), axis=1)
    return departure_points(passbands, rows.teff_k, ln_omega(rows.radius_rsun, 10.0), ln_flux_jy(passbands, absolute))


def dwarf_points(dwarfs: Dwarfs) -> FloatArray:
    """Return ln D of each dwarf in each band, (n_stars, n_bands)."""
    passbands = _passbands(dwarfs.passbands)
    omega = ln_omega(dwarfs.radius_rsun, dwarfs.distance_pc)
    return departure_points(passbands, dwarfs.teff_k, omega, ln_flux_jy(passbands, dwarfs.magnitude))


def dwarf_means(dwarfs: Dwarfs) -> tuple[FloatArray, FloatArray, FloatArray]:
    """Return the published temperatures that enough dwarfs share, the medians of their ln D, and their errors."""
    points = dwarf_points(dwarfs)
    published = np.unique(dwarfs.teff_k[dwarfs.teff_k >= _COOLEST_MEAN_K])
    means, count = np.full((len(published), points.shape[1]), np.nan), np.zeros((len(published), points.shape[1]))
    for row, teff_k in enumerate(published):
        shared = points[dwarfs.teff_k == teff_k]
        count[row] = np.isfinite(shared).sum(axis=0)
        enough = count[row] >= _LEAST_STARS
        means[row, enough] = np.nanmedian(shared[:, enough], axis=0)
    about = points - means[np.clip(np.searchsorted(published, dwarfs.teff_k), 0, len(published) - 1)]
    scatter = _MAD_TO_SIGMA * np.nanmedian(np.abs(about), axis=0)
    of_median = np.sqrt(0.5 * np.pi / np.maximum(count, 1.0)) * scatter
    return published, means, np.hypot(_POINT_ERROR, of_median)


def _row_errors(rows: MeanSequence, points: FloatArray) -> FloatArray:
    conditions = [rows.teff_k < _LATE_K, rows.teff_k > _EARLY_K]
    errors = np.select(conditions, [_LATE_POINT_ERROR, _EARLY_POINT_ERROR], _POINT_ERROR)
    return np.broadcast_to(errors[:, np.newaxis], points.shape)


def _sdss_of_sequence(rows: MeanSequence) -> relations.Magnitudes:
    """Return u g r i z of SDSS along the sequence: the mean of two published relations where both hold."""
    u, b, v, r, i = (rows.magnitude[name] for name in _JOHNSON)
    jester = relations.sdss_from_johnson(u, b, v, r, i)
    tonry = relations.sdss_from_panstarrs(relations.panstarrs_from_johnson(b, v, i))
    warm = rows.teff_k > _WARM_K
    both = {band: np.where(warm, 0.5 * (jester[band] + tonry[band]), tonry[band]) for band in "gri"}
    trusted = rows.teff_k > _COOLEST_RELATION_K
    return {"u": jester["u"], "z": jester["z"]} | {band: np.where(trusted, both[band], np.nan) for band in both}


def _late_sdss(rows: MeanSequence, dwarfs: Dwarfs) -> relations.Magnitudes:
    """Return g r i of SDSS of the coolest rows of the sequence: J, and the colours of dwarfs of the same T."""
    magnitude = dict(zip(dwarfs.passbands, dwarfs.magnitude.T, strict=True))
    late = {}
    for band in "gri":
        colour = magnitude[f"sdss_{band}"] - magnitude["2mass_j"]
        usable = np.isfinite(colour) & (dwarfs.teff_k < _LATE_K)
        published, count = np.unique(dwarfs.teff_k[usable], return_counts=True)
        published = published[count >= _FEWEST_LATE]
        medians = [float(np.median(colour[usable & (dwarfs.teff_k == teff_k)])) for teff_k in published]
        at_rows = np.interp(rows.teff_k, published, medians, left=np.nan, right=np.nan)
        late[band] = rows.magnitude["2mass_j"] + at_rows
    return late


def _smooth(
    teff_k: FloatArray, points: FloatArray, errors: FloatArray, bands: list[str]
) -> dict[str, tuple[FloatArray, BoolArray]]:
    """Return a smooth curve at the nodes, and where it holds, of each band with enough points."""
    enough = [place for place in range(len(bands)) if np.isfinite(points[:, place]).sum() >= _LEAST_POINTS]
    smoothness = choose_smoothness(teff_k, points[:, enough], errors[:, enough])
    found = {}
    for place in enough:
        known = np.isfinite(points[:, place])
        curve = at_nodes(fit_curve(teff_k[known], points[known, place], errors[known, place], smoothness))
        found[bands[place]] = (curve, _among(teff_k[known]))
    return found


def _blend(parts: list[tuple[FloatArray, BoolArray, float]]) -> tuple[FloatArray, BoolArray]:
    """Return the weighted mean of curves where several hold; one that ends gives way to the others beforehand."""
    weights = np.stack([weight * _taper(inside) for _, inside, weight in parts])
    inside = weights.sum(axis=0) > 0.0
    total = np.where(inside, weights.sum(axis=0), 1.0)
    return np.sum([weight * curve for weight, (curve, *_) in zip(weights, parts, strict=True)], axis=0) / total, inside


def _taper(inside: BoolArray) -> FloatArray:
    """Return the weight of a curve at the nodes: 1 well inside its range, less towards where it does not hold."""
    outside = LN_TEFF_NODES[~inside]
    distance = np.min(np.abs(LN_TEFF_NODES[:, np.newaxis] - outside), axis=1) - LN_TEFF_STEP
    return np.where(inside, np.clip(distance / _TAPER, 1e-3, 1.0), 0.0)


def _among(teff_k: FloatArray) -> BoolArray:
    """Return the nodes that lie among points, not in a wide gap between them, and the first ones beyond."""
    points = np.sort(np.log(teff_k))
    points = np.concatenate([[points[0] - 0.5 * LN_TEFF_STEP], points, [points[-1] + 0.5 * LN_TEFF_STEP]])
    right = np.searchsorted(points, LN_TEFF_NODES)
    among = (right > 0) & (right < len(points))
    right = np.clip(right, 1, len(points) - 1)
    return among & (points[right] - points[right - 1] < _WIDEST_GAP)


def _passbands(names: list[str] | tuple[str, ...]) -> list[Passband]:
    return [load_passband(name) for name in names]


def _add_sdss_u_z(curves: Curves, rows: MeanSequence, locus: Locus) -> None:
    """Add u and z of SDSS: from the sequence's UBVRcIc where it is warm, from the locus of dwarfs below."""
    sdss = _sdss_of_sequence(rows)
    magnitude = _magnitudes(curves, {"g": "sdss_g", "i": "sdss_i"})
    of_locus = locus.u_and_z(magnitude["g"], magnitude["i"])
    for band in "uz":
        name = f"sdss_{band}"
        warm = rows.teff_k > _WARM_K
        points = magnitude_points(rows, {name: sdss[band]})
        of_rows = _smooth(rows.teff_k[warm], points[warm], _row_errors(rows, points)[warm], [name])[name]
        cool = np.where(TEFF_NODES_K < _WARM_K, _ln_d_of(name, of_locus[band]), np.nan)
        ln_d, inside = _blend([(*of_rows, 1.0), (np.nan_to_num(cool), np.isfinite(cool), 1.0)])
        source = f"UBVRcIc of the sequence through {relations.JESTER}; below {_WARM_K:.0f} K g and i through {LOCUS}"
        curves.add(name, ln_d, inside, "chain", source)


def _add_near_ultraviolet(curves: Curves, rows: MeanSequence, dwarfs: Dwarfs) -> None:
    """Add GALEX NUV: dwarfs where cool, J and Ks of the sequence for F to K, and Vega."""
    name = "galex_nuv"
    j, ks = rows.magnitude["2mass_j"], rows.magnitude["2mass_ks"]
    warm = (rows.teff_k > NUV_RELATION_K[0]) & (rows.teff_k < NUV_RELATION_K[1])
    of_rows = magnitude_points(rows, {name: relations.nuv_from_2mass(j, ks)})[warm, 0]
    teff_k, means, errors = dwarf_means(dwarfs)
    of_dwarfs, their_errors = means[:, dwarfs.passbands.index(name)], errors[:, dwarfs.passbands.index(name)]
    cool = np.isfinite(of_dwarfs)
    points_k = np.concatenate([teff_k[cool], rows.teff_k[warm], [VEGA_TEFF_K]])
    points = np.concatenate([of_dwarfs[cool], of_rows, [VEGA_NUV_LN_D]])
    point_errors = np.concatenate([their_errors[cool], np.full(len(of_rows) + 1, _NUV_POINT_ERROR)])
    curve, inside = _smooth(points_k, points[:, np.newaxis], point_errors[:, np.newaxis], [name])[name]
    curves.add(
        name, curve, inside, "chain", f"nearby dwarfs; J and Ks of the sequence through {relations.FINDEISEN}; Vega"
    )


def _add_relations(curves: Curves) -> None:
    """Add the bands that published relations give from SDSS: Pan-STARRS, DECam and Rubin."""
    sdss = _magnitudes(curves, {band: f"sdss_{band}" for band in "ugriz"})
    des = relations.des_from_sdss(sdss)
    systems = {
        "panstarrs": (
            relations.panstarrs_from_sdss(sdss),
            f"SDSS through {relations.FINKBEINER} and {relations.TONRY}",
        ),
        "decam": (des, f"SDSS through {relations.DES}"),
        "rubin": (relations.rubin_from_des(des), f"SDSS through {relations.DES}, and {relations.RUBIN}"),
    }
    for system, (magnitude, source) in systems.items():
        for band, values in magnitude.items():
            ln_d = _ln_d_of(f"{system}_{band}", values)
            inside = np.isfinite(ln_d) & (TEFF_NODES_K > _COOLEST_CHAIN_K)
            curves.add(f"{system}_{band}", np.nan_to_num(ln_d), inside, "chain", source)


def _add_transferred(curves: Curves) -> None:
    """Add the bands that nothing else gives, and carry those of relations on to where their neighbours hold."""
    names = [name for name in curves.ln_d if name.partition("_")[0] not in _FAR_SYSTEMS]
    known = np.stack([curves.known(name) for name in names])
    others = [name for name in builtin_names() if name not in curves.ln_d]
    related = [name for name in names if curves.kind[name] == "chain" and not name.startswith("sdss")]
    wanted = _passbands([*others, *related])
    found = transfer(_passbands(names), known, wanted, TEFF_NODES_K)
    for passband, ln_d in zip(wanted, found, strict=True):
        name, near = passband.name, _neighboured(curves, names, passband)
        if name in related:
            curve, inside = _carried_on(curves, name, ln_d, near)
            curves.add(name, curve, inside, "chain", curves.source[name])
        elif name.startswith("gaia_dr3"):
            other = name.replace("dr3", "dr2")
            curves.add(name, curves.ln_d[other], curves.inside[other], "chain", f"as {other}")
        elif np.any(near):
            curves.add(name, ln_d, near, "chain", "a smooth departure per wavelength through the bands around it")


def _carried_on(curves: Curves, name: str, transferred: FloatArray, near: BoolArray) -> tuple[FloatArray, BoolArray]:
    """Return a relation's curve, and beyond its ends the transferred one, shifted to join it."""
    places = np.flatnonzero(curves.inside[name])
    offset = (curves.ln_d[name] - transferred)[np.clip(np.arange(len(transferred)), places[0], places[-1])]
    return np.where(curves.inside[name], curves.ln_d[name], transferred + offset), near | curves.inside[name]


def _neighboured(curves: Curves, names: list[str], wanted: Passband) -> BoolArray:
    """Return the nodes at which known bands lie on both sides of a band, both near in wavelength."""
    distance = np.log([passband.pivot_um for passband in _passbands(names)]) - np.log(wanted.pivot_um)
    inside = np.stack([curves.inside[name] for name in names])
    bluer, redder = (distance < 0.05) & (distance > -_NEAR), (distance > -0.05) & (distance < _NEAR)
    return np.any(inside[bluer], axis=0) & np.any(inside[redder], axis=0) & (TEFF_NODES_K > _COOLEST_CHAIN_K)


def _magnitudes(curves: Curves, names: dict[str, str]) -> relations.Magnitudes:
    """Return magnitudes at the nodes of a star of Ω = 1, by the short names of the bands."""
    passbands = _passbands(list(names.values()))
    ln_flux = blackbody_ln_flux(passbands, TEFF_NODES_K) + np.stack(
        [curves.known(name) for name in names.values()], axis=1
    )
    zero_points = ln_flux_jy(passbands, np.zeros(len(passbands)))
    return dict(zip(names, ((zero_points - ln_flux) / (0.4 * np.log(10.0))).T, strict=True))


def _ln_d_of(name: str, magnitude: FloatArray) -> FloatArray:
    """Return ln D at the nodes from the magnitude of a star of Ω = 1."""
    passbands = _passbands([name])
    return (ln_flux_jy(passbands, magnitude[:, np.newaxis]) - blackbody_ln_flux(passbands, TEFF_NODES_K))[:, 0]


def learn_builtin(rows: MeanSequence, dwarfs: Dwarfs, locus: Locus) -> Departures:
    """Return the built-in departures learnt from the mean dwarf sequence, nearby dwarfs and the locus of SDSS.

    Parameters
    ----------
    rows : MeanSequence
        Gives the curves of most bands.
    dwarfs : Dwarfs
        Give most of the curves of K and M dwarfs, the factors and the scatter.
    locus : Locus
        Gives u and z of SDSS for M dwarfs.
    """
    curves = builtin_curves(rows, dwarfs, locus)
    bands = [name for name in builtin_names() if name in curves.ln_d]
    passbands = _passbands(bands)
    inside = np.stack([curves.inside[name] for name in bands])
    ln_d = np.stack([extended(curves.ln_d[name], curves.inside[name]) for name in bands])
    cool = cool_covariance(curves, dwarfs)
    loading = _loadings(cool, passbands)
    scatter = _scatters(cool, passbands, curves)
    return Departures(
        bands=tuple(bands),
        digests=tuple(passband.digest() for passband in passbands),
        kind=tuple(curves.kind[name] for name in bands),
        source=tuple(curves.source[name] for name in bands),
        pivot_um=np.array([passband.pivot_um for passband in passbands]),
        range_k=np.stack([TEFF_NODES_K[held][[0, -1]] for held in inside]),
        ln_d=ln_d,
        loading=np.stack([[extended(row, held) for row, held in zip(loading, inside, strict=True)]]),
        scatter=np.stack([extended_scatter(row, held) for row, held in zip(scatter, inside, strict=True)]),
        factors=("photosphere",),
        temperature_scatter=_about_scale(cool.temperature, _WARM_SHIFT, _HOT_SHIFT),
        luminosity_scatter=_about_scale(cool.luminosity, _WARM_LUMINOSITY, _HOT_LUMINOSITY),
        provenance={
            "curves": f"{sequence.SOURCE}; {nearby.SOURCE}",
            "temperature_scale": f"of the sequence; below {_COOL_K[0]:.0f} K {_DWARFS_WEIGHT:.0f} parts of the "
            "dwarfs' to one of the sequence's, which differ by up to 3 per cent in T",
            "photosphere": f"{len(dwarfs.teff_k)} dwarfs below {_COOL_K[0]:.0f} K; above, metallicity in U and B, and "
            f"from {_HOT_RANGE_K[0]:.0f} K on a reddening of {_REDDENING_MAG} mag (assumed)",
            "temperature": "scatter of the published temperatures of those dwarfs about the scale, and half of what "
            f"divides the two scales; {_WARM_SHIFT} in ln T for warm stars and {_HOT_SHIFT} for hot ones (assumed)",
            "luminosity": f"likewise of the published luminosities; {_WARM_LUMINOSITY} in ln L for warm stars and "
            f"{_HOT_LUMINOSITY} for hot ones (assumed)",
        },
    )


@dataclass(frozen=True, eq=False)
class CoolCovariance:
    """How K and M dwarfs scatter in their bands.

    ``loading`` and ``scatter`` are (n_bands, n_nodes), ``temperature`` and ``luminosity`` (n_nodes,) the scatter of
    ln T and of ln L about the scale.
    """

    bands: list[str]
    loading: FloatArray
    scatter: FloatArray
    temperature: FloatArray
    luminosity: FloatArray


def cool_covariance(curves: Curves, dwarfs: Dwarfs) -> CoolCovariance:
    """Return how dwarfs scatter about their own curves, widened by half of what divides the two temperature scales."""
    bands, factors = dwarf_factors(curves, dwarfs)
    scatter = np.repeat(factors.scatter[:, np.newaxis], len(TEFF_NODES_K), axis=1)
    slope = _dwarf_slopes(curves, bands)
    gap = np.stack([_half_gap(curves, band) for band in bands])
    # What of the gap is a shift in T or in L widens those, the rest joins what is each band's own.
    patterns = np.stack([slope.T, np.ones_like(slope.T)], axis=2)  # (n_nodes, n_bands, 2)
    shift = np.einsum("nkb,bn->nk", np.linalg.pinv(patterns), gap)
    return CoolCovariance(
        bands,
        factors.loading(TEFF_NODES_K)[0],
        np.hypot(scatter, gap - np.einsum("nbk,nk->bn", patterns, shift)),
        np.hypot(factors.shift[0], shift[:, 0]),
        np.hypot(factors.shift[1], shift[:, 1]),
    )


def dwarf_factors(curves: Curves, dwarfs: Dwarfs) -> tuple[list[str], Factors]:
    """Return the trusted bands of the dwarfs, and one factor of their residuals: z_1 > 0 where B is faint."""
    sample = dwarfs.only(dwarfs.teff_k >= _FACTOR_SAMPLE_K)
    bands, residual, error = dwarf_residuals(curves, sample)
    slopes = _dwarf_slopes(curves, bands)
    slope = np.stack([np.interp(np.log(sample.teff_k), LN_TEFF_NODES, row) for row in slopes], axis=1)
    found = learn_factors(sample.teff_k, residual, error, 1, slope)
    sign = -np.sign(found.coefficient[0, 0, bands.index("johnson_b")])
    return bands, replace(found, coefficient=sign * found.coefficient)


def dwarf_residuals(curves: Curves, dwarfs: Dwarfs) -> tuple[list[str], FloatArray, FloatArray]:
    """Return the bands of the dwarfs that can be trusted, and ln of observed over expected flux and its error."""
    untrusted = ("galex", *_UNTRUSTED)
    bands = [name for name in dwarfs.passbands if name in curves.of_dwarfs and not name.startswith(untrusted)]
    columns = [dwarfs.passbands.index(name) for name in bands]
    expected = np.stack([_held(curves.of_dwarfs[name], np.log(dwarfs.teff_k)) for name in bands], axis=1)
    return bands, dwarf_points(dwarfs)[:, columns] - expected, 0.4 * np.log(10.0) * dwarfs.error[:, columns]


def _dwarf_slopes(curves: Curves, bands: list[str]) -> FloatArray:
    ln_d = np.stack([_held(curves.of_dwarfs[name], LN_TEFF_NODES) for name in bands])
    return temperature_slope(_passbands(bands), ln_d)


def _held(curve: FloatArray, ln_teff: FloatArray) -> FloatArray:
    known = np.isfinite(curve)
    return np.interp(ln_teff, LN_TEFF_NODES[known], curve[known])


def _half_gap(curves: Curves, band: str) -> FloatArray:
    """Return half of what the dwarfs' curve lies above the sequence's, held below both, none above both."""
    nowhere = np.full(len(TEFF_NODES_K), np.nan)
    gap = 0.5 * (curves.of_dwarfs[band] - curves.of_sequence.get(band, nowhere))
    known = np.isfinite(gap)
    if not np.any(known):
        return np.zeros(len(TEFF_NODES_K))
    return np.asarray(np.interp(LN_TEFF_NODES, LN_TEFF_NODES[known], gap[known], right=0.0))


def _loadings(cool: CoolCovariance, passbands: list[Passband]) -> FloatArray:
    """Return the photosphere's loadings at the nodes, (n_bands, n_nodes)."""
    cold, hot = 1.0 - _rise(_COOL_K), _rise(_HOT_RANGE_K)
    metals = np.array([_METALLICITY.get(passband.name, 0.0) for passband in passbands])
    dust = np.array([float(extinction_ratio("G23", 3.1, passband.pivot_um)) for passband in passbands])
    dust *= -0.4 * np.log(10.0) * _REDDENING_MAG
    loading = cold * _across_bands(cool.bands, cool.loading, passbands)
    loading += np.outer(metals, (1.0 - cold) * (1.0 - hot)) + np.outer(dust, hot)
    return loading * np.array([passband.pivot_um > _OF_PHOTOSPHERE_UM for passband in passbands])[:, np.newaxis]


def _about_scale(cool: FloatArray, of_warm: float, of_hot: float) -> FloatArray:
    """Return a scatter of cool, warm and hot stars about the scale at the nodes."""
    cold, hot = 1.0 - _rise(_COOL_K), _rise(_HOT_RANGE_K)
    return np.asarray(cold * cool + (1.0 - cold) * of_warm + hot * (of_hot - of_warm))


def _scatters(cool: CoolCovariance, passbands: list[Passband], curves: Curves) -> FloatArray:
    """Return u of all bands at the nodes."""
    of_dwarfs = _across_bands(cool.bands, cool.scatter, passbands)
    coolness = 1.0 - _rise(_COOL_K)
    scatter = np.empty((len(passbands), len(TEFF_NODES_K)))
    for row, passband in enumerate(passbands):
        name = passband.name
        warm, cold = np.full(len(TEFF_NODES_K), _WARM_SCATTER), of_dwarfs[row]
        if name in _ULTRAVIOLET_SCATTER:
            cold, warm = (np.full(len(TEFF_NODES_K), value) for value in _ULTRAVIOLET_SCATTER[name])
        elif curves.kind[name] == "chain" and name not in cool.bands and not name.startswith("gaia"):
            cold, warm = np.hypot(cold, _CHAIN_SCATTER), np.hypot(warm, _CHAIN_SCATTER)
        scatter[row] = coolness * cold + (1.0 - coolness) * warm
    return scatter


def _across_bands(bands: list[str], values: FloatArray, passbands: list[Passband]) -> FloatArray:
    """Return values of bands (n_bands, n_nodes) carried to other bands: a band's own, or straight in ln wavelength."""
    narrow = [bands.index(name) for name in _NARROW]
    ln_pivot = np.log([load_passband(name).pivot_um for name in _NARROW])
    result = np.empty((len(passbands), values.shape[1]))
    for row, passband in enumerate(passbands):
        own = passband.name.replace("gaia_dr3", "gaia_dr2")
        if own in bands:
            result[row] = values[bands.index(own)]
        else:
            for node in range(values.shape[1]):
                result[row, node] = np.interp(np.log(passband.pivot_um), ln_pivot, values[narrow, node])
    return result


def _rise(between_k: tuple[float, float]) -> FloatArray:
    """Return a smooth step at the nodes, from 0 below the first temperature to 1 above the second."""
    low, high = np.log(between_k)
    t = np.clip((LN_TEFF_NODES - low) / (high - low), 0.0, 1.0)
    return np.asarray(t * t * (3.0 - 2.0 * t))


def main(arguments: list[str]) -> None:
    """Write the built-in departures."""
    reference, out = Path(arguments[0]), Path(arguments[1])
    dwarfs = read_dwarfs(reference / "nearby_dwarfs_a.csv")
    locus = read_locus(reference / "dwarf_locus_ugrizJHK_2014.csv")
    write_departures(learn_builtin(read_mean_sequence(meanstars_path()), dwarfs, locus), out)


if __name__ == "__main__":
    main(sys.argv[1:])
