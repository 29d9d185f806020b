"""TOML files that people write, read against a schema; whatever does not fit is refused by name."""

import tomllib
from pathlib import Path
from typing import Any

from .errors import InputError

_KINDS = {
    str: "a text",
    float: "a number",
    int: "a whole number",
    bool: "true or false",
    list: "a list",
}


def read_toml(path: Path, schema: dict[str, Any]) -> dict[str, Any]:
    """The tree of `path`, with whole numbers made floats where the schema says so.

    `schema` maps each key to a type (str, float, int, bool, list), to a dict for a table of known
    keys, or to a one-element list holding such a dict for an array of tables. A key "*"
    stands for any name.

    Raises
    ------
    InputError
        If the file is missing or not TOML, a key is unknown, or a value has the wrong type.
    """
    if not path.is_file():
        raise InputError(f"{path}: no such file")
    try:
        tree = tomllib.loads(path.read_text(encoding="utf-8"))
    except (tomllib.TOMLDecodeError, UnicodeDecodeError) as error:
        raise InputError(f"{path}: not TOML: {error}") from error
    return _checked_table(path, tree, schema, "")


def _checked_table(path: Path, tree: Any, schema: dict[str, Any], name: str) -> dict[str, Any]:
    if not isinstance(tree, dict):
        raise InputError(f"{path}: {name} is a table: write [{name}]")
    checked = {}
    for key, value in tree.items():
        full = f"{name}.{key}" if name else key
        wanted = schema.get(key, schema.get("*"))
        if wanted is None:
            raise InputError(f"{path}: unknown key {full!r}; known here are {', '.join(schema)}")
        checked[key] = _checked(path, value, wanted, full)
    return checked


def _checked(path: Path, value: Any, wanted: Any, name: str) -> Any:
    if isinstance(wanted, dict):
        return _checked_table(path, value, wanted, name)
    if isinstance(wanted, list):
        if not isinstance(value, list):
            raise InputError(f"{path}: {name} is an array of tables: write [[{name}]]")
        return [_checked_table(path, each, wanted[0], name) for each in value]
    if wanted is float and type(value) is int:
        return float(value)
    if type(value) is not wanted:
        raise InputError(f"{path}: {name} must be {_KINDS[wanted]}, got {value!r}")
    return value
