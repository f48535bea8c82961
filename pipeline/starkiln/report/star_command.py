"""The command that shows one star."""

from __future__ import annotations

import hashlib
import json
import re
from pathlib import Path

from starkiln.errors import EnvironmentTrouble


def star(run_dir: Path, star_id: str, output: Path = Path(), as_json: bool = False) -> str:
    """Return what is known of one star of a run, and write its picture.

    Parameters
    ----------
    run_dir
        A run directory, or the folder of one generation; it is only read.
    star_id
        The id, as a user types it.
    output
        The folder of the picture, made if need be.
    as_json
        Whether to return JSON, with a schema number.

    Raises
    ------
    SettingsError
        If nothing is published there, or there is no such id.
    EnvironmentTrouble
        If a file cannot be read, or the picture cannot be written.
    """
    from starkiln.engine.onestar import find_star
    from starkiln.report.star import describe_star, star_json
    from starkiln.report.star_figure import save_star

    found = find_star(run_dir, star_id)
    pictures: list[Path] = []
    if found.stored.outcome == "catalogue" and found.model is not None:
        stem = output / file_stem(str(found.star_id))
        try:
            pictures = save_star(found, stem)
        except OSError as error:
            raise EnvironmentTrouble(f"{stem}: {error.strerror or error}; give another --output") from error
    return json.dumps(star_json(found, pictures), indent=2) if as_json else describe_star(found, pictures)


def file_stem(star_id: str) -> str:
    """Return a file name without its ending: the id, or as much of it as any system takes, with a digest."""
    plain = re.sub(r"[^A-Za-z0-9._+-]+", "_", star_id)[:60]
    digest = hashlib.sha256(star_id.encode("utf-8", "surrogatepass")).hexdigest()[:8]
    return f"star-{plain}" if plain == star_id else f"star-{plain}-{digest}"
