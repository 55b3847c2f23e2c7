"""What a user says of a model file: the tables [variables] and [vertical], as dict or TOML file."""

import tomllib
from pathlib import Path

from chansim.errors import SceneError
from chansim.scene.formula_terms import KINDS


def read_mapping(mapping):
    """The tables of a mapping.

    Parameters
    ----------
    mapping : None, {quantity: entry} with perhaps "vertical" among the keys, {"variables": ..., "vertical": ...}, or
        the path of a TOML file with the tables [variables] and [vertical]

    Returns
    -------
    variables, vertical : dict; dict or None

    Raises
    ------
    SceneError : the file cannot be read, or has no such tables
    """
    if mapping is None:
        return {}, None
    if isinstance(mapping, dict):
        return _tables(mapping if "variables" in mapping else _split(mapping), "mapping")
    try:
        table = tomllib.loads(Path(mapping).read_text(encoding="utf-8"))
    except (OSError, tomllib.TOMLDecodeError, UnicodeDecodeError) as error:
        raise SceneError(
            f"mapping file {mapping}: cannot be read ({error}); it is TOML with a table [variables]"
        ) from error
    if not {"variables", "vertical"} & set(table):
        raise SceneError(f'mapping file {mapping}: no table [variables], in which lines like temperature = "T" stand')
    return _tables(table, f"mapping file {mapping}")


def _split(mapping):
    return {"variables": {k: v for k, v in mapping.items() if k != "vertical"}, "vertical": mapping.get("vertical")}


def _tables(table, name):
    variables, vertical = table.get("variables") or {}, table.get("vertical")
    for title, part in (("variables", variables), ("vertical", vertical or {})):
        if not isinstance(part, dict):
            raise SceneError(f"{name}: {title} is a table, in which lines like NAME = ... stand")
    if vertical and not {"coordinate", "known_pressure"} & set(vertical):
        raise SceneError(
            f'{name}: [vertical] needs a line coordinate = "...", one of height, {", ".join(KINDS)}; then its terms'
        )
    return variables, vertical
