"""The published methods behind a catalogue, to be cited with it. References are from memory unless a link is given."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

_ALWAYS = (
    ("Ensemble sampling", "Foreman-Mackey et al. 2013, PASP 125, 306 (emcee)"),
    ("Effective sample size, R-hat", "Vehtari et al. 2021, Bayesian Analysis 16, 667"),
    ("Distances from parallaxes", "Bailer-Jones 2015, PASP 127, 994"),
    ("Solar units, bolometric magnitudes", "IAU 2015 resolutions B2 and B3; Prša et al. 2016, AJ 152, 41"),
    ("Units and tables", "Astropy Collaboration 2022, ApJ 935, 167"),
)
_LAWS = {
    "CCM89": "Cardelli, Clayton & Mathis 1989, ApJ 345, 245",
    "O94": "O'Donnell 1994, ApJ 422, 158",
    "F99": "Fitzpatrick 1999, PASP 111, 63",
    "F04": "Fitzpatrick 2004, ASP Conf. Ser. 309, 33",
    "M14": "Maíz Apellániz et al. 2014, A&A 564, A63",
    "F19": "Fitzpatrick et al. 2019, ApJ 886, 108",
    "G23": "Gordon et al. 2023, ApJ 950, 86",
}
_COLOURS = (
    ("Colours of blackbodies on this page", "Wyman, Sloan & Shirley 2013, JCGT 2(2), 1; IEC 61966-2-1"),
    ("Palette of this page", "Okabe & Ito 2008, Color Universal Design, https://jfly.uni-koeln.de/color/"),
    ("Density scale of this page", "cividis: Nuñez, Anderton & Renslow 2018, PLoS ONE 13, e0199239"),
)


def sources(settings: Mapping[str, Any], passbands: Mapping[str, Mapping[str, Any]]) -> list[tuple[str, str]]:
    """Return what each cited source was used for, and the source.

    Parameters
    ----------
    settings
        The sections of the run's settings.
    passbands
        ``passbands`` of run.json.
    """
    model = settings.get("model", {})
    found = list(_ALWAYS)
    if model.get("outliers"):
        found.append(("Mixture for outlying bands", "Hogg, Bovy & Lang 2010, arXiv:1008.4686"))
    law = model.get("extinction", {}).get("law")
    if law:
        found.append((f"Extinction law {law}", _LAWS.get(law, "see the dust_extinction package")))
    if model.get("photosphere") != "blackbody":
        is_builtin = model.get("departures") == "builtin"
        where = "Pecaut & Mamajek 2013, ApJS 208, 9, in its 2022 version" if is_builtin else model.get("departures")
        found.append(("Photospheres' departures, and so the temperature scale", str(where)))
    for label, band in passbands.items():
        found.append((f"Passband {label}", f"{band.get('curve_source', '–')}; zero point: {band.get('source', '–')}"))
    return [*found, *_COLOURS]
