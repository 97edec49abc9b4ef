"""What is wrong in a recipe, in plain English, with the line."""

from __future__ import annotations

import json
import re
from difflib import get_close_matches
from typing import TYPE_CHECKING, Any

from printmetrics.measure.kinds import KINDS

if TYPE_CHECKING:
    from collections.abc import Callable, Iterable

    from pydantic import ValidationError
    from pydantic_core import ErrorDetails

Path = tuple[str | int, ...]

# Multi-line strings first, so that their quotes are not taken for empty strings.
_STRING_OR_COMMENT = re.compile(
    r'"""(?:\\.|[^\\])*?"{3,5}|\'\'\'.*?\'{3,5}|"(?:\\.|[^"\\\n])*"|\'[^\'\n]*\'|#[^\n]*', re.DOTALL
)
_CONTROL = re.compile(r"[\x00-\x1f\x7f-\x9f]")
_HEADER = re.compile(r"\s*(\[\[?)([^\[\]]+)\]")


_SHOWN = 60  # characters of a wrong value


def nearest(name: str, known: Iterable[str]) -> str:
    """Return the hint for a mistyped name.

    Parameters
    ----------
    name : str
        As written.
    known : iterable of str
        The names there are.

    Returns
    -------
    str
        A sentence with the nearest of them, or all.
    """
    known = list(known)
    near = get_close_matches(name, known, n=1)
    return f"did you mean {near[0]!r}?" if near else f"known here: {', '.join(known)}."


def line_numbers(text: str) -> dict[Path, int]:
    r"""Return the line on which each table and key of a TOML text begins.

    Keys inside inline tables are not listed: their line is that of the key that holds them.

    Parameters
    ----------
    text : str
        Valid TOML.

    Returns
    -------
    dict
        Line numbers, counted from 1, by path, such as ``("feature", 0, "name")``.

    Examples
    --------
    >>> line_numbers("a = 1\n[[b]]\nc = 2")
    {('a',): 1, ('b', 0): 2, ('b',): 2, ('b', 0, 'c'): 3}
    """
    lines: dict[Path, int] = {}
    counts: dict[Path, int] = {}
    table: Path = ()
    depth = 0
    for number, line in enumerate(_STRING_OR_COMMENT.sub(_blank, text).splitlines(), 1):
        header = _HEADER.match(line) if depth == 0 else None
        if header:
            table = ()
            *parents, last = _keys(header[2])
            for key in parents:
                table = _last(counts, (*table, key))
            table = (*table, last)
            if header[1] == "[[":
                counts[table] = counts.get(table, 0) + 1
                lines[_last(counts, table)] = number
            lines.setdefault(table, number)
            table = _last(counts, table)
            continue
        if depth == 0 and "=" in line:
            key_path = table
            for key in _keys(line.partition("=")[0]):
                key_path = (*key_path, key)
                lines.setdefault(key_path, number)
        depth += sum(line.count(c) for c in "[{") - sum(line.count(c) for c in "]}")
    return lines


def _blank(match: re.Match[str]) -> str:
    """Keep line breaks, and plain strings, which may be keys, without what could be taken for TOML's own signs."""
    found = match[0]
    if found.startswith("#"):
        return ""
    return "\n" * found.count("\n") if found[:3] in ('"""', "'''") else re.sub(r"[\[\]{}=.#]", "_", found)


def _keys(dotted: str) -> list[str]:
    return [key.strip().strip("\"'") for key in dotted.split(".")]


def _last(counts: dict[Path, int], table: Path) -> Path:
    return (*table, counts[table] - 1) if table in counts else table


def explain(
    error: ValidationError, raw: dict[str, Any], lines: dict[Path, int], schema: dict[str, Any], file: str
) -> str:
    """Return one message that lists all that is wrong.

    Parameters
    ----------
    error : ValidationError
        What the models found.
    raw : dict
        The recipe as parsed.
    lines : dict
        From `line_numbers`.
    schema : dict
        The recipe's JSON Schema: known keys and their meaning.
    file : str
        The recipe's file name.

    Returns
    -------
    str
        A line for each problem, in the order of the file.
    """
    by_path: dict[Path, list[ErrorDetails]] = {}
    for details in error.errors(include_url=False):
        by_path.setdefault(_path(details, raw), []).append(details)
    found = sorted(
        (_line(path, lines), f"{_place(path, raw, schema)}{_text(path, group, raw, schema)}")
        for path, group in by_path.items()
    )
    count = "1 problem" if len(found) == 1 else f"{len(found)} problems"
    # A name may hold signs that would steer a terminal.
    listed = "".join(
        f"\n  {file}, line {line}: {_CONTROL.sub(lambda c: ascii(c[0])[1:-1], text)}" for line, text in found
    )
    return f"the recipe cannot be used, {count}:{listed}"


def _line(path: Path, lines: dict[Path, int]) -> int:
    return next((lines[path[:n]] for n in range(len(path), 0, -1) if path[:n] in lines), 1)


def _path(details: ErrorDetails, raw: object) -> Path:
    """Follow an error's place through the recipe, leaving out what only the models know."""
    path: Path = ()
    node: Any = raw
    loc = details["loc"]
    for n, part in enumerate(loc):
        if (isinstance(node, dict) and part in node) or (
            isinstance(node, list) and isinstance(part, int) and part < len(node)
        ):
            path, node = (*path, part), node[part]  # type: ignore[index]
        elif n == len(loc) - 1 and details["type"] == "missing" and isinstance(part, str):
            path = (*path, part)
    key = details.get("ctx", {}).get("key")
    if key is not None:
        return (*path, key)
    if details["type"].startswith("union_tag"):
        return (*path, "kind")
    if details["type"] == "value_error" and isinstance(node, dict):  # a feature's models name the key in their text
        text = str(details["ctx"]["error"])
        limits = [word for word in re.findall(r"'(\w+)'", text) if word in node.get("limits", {})]
        return (*path, "limits", limits[0]) if limits else (*path, *[w for w in text.split()[:1] if w in node])
    return path


def _place(path: Path, raw: dict[str, Any], schema: dict[str, Any]) -> str:
    words: list[str] = []
    rest = path
    if len(path) > 1 and path[0] == "feature" and isinstance(path[1], int):
        feature = raw["feature"][path[1]]
        name = feature.get("name") if isinstance(feature, dict) else None
        words.append(f'feature "{name}"' if isinstance(name, str) and name else f"feature {path[1] + 1}")
        rest = path[2:]
    elif len(path) > 1:
        words.append(f"[{path[0]}]")
        rest = path[1:]
    if len(path) == 1 and (
        isinstance(raw.get(key := str(path[0])), dict) or "$ref" in schema["properties"].get(key, {})
    ):
        return f"section [{key}]: "
    if rest[:1] == ("limits",) and len(rest) > 1:
        words.append("limits" if len(rest) == 2 else f'limits of "{rest[1]}"')  # noqa: PLR2004  (the quantity itself)
        rest = rest[1:] if len(rest) == 2 else rest[2:]  # noqa: PLR2004
    words += [f'key "{part}"' if isinstance(part, str) else f"entry {part + 1}" for part in rest]
    return ", ".join(words) + ": " if words else ""


def _text(path: Path, group: list[ErrorDetails], raw: dict[str, Any], schema: dict[str, Any]) -> str:
    first = group[0]
    kind, ctx = first["type"], first.get("ctx", {})
    key = next(n for n in range(len(path), 0, -1) if isinstance(path[n - 1], str)) - 1 if path else 0
    siblings = _table(schema, path[:key], raw).get("properties", {})
    about = siblings.get(path[key], {}).get("description", "") if path else ""
    if kind == "recipe":
        text = str(ctx["text"])
    elif kind == "value_error":
        text = str(ctx["error"])
        text += "" if ";" in text else "; correct it"
    elif kind == "extra_forbidden" and path == ("locate",):
        text = "is not available in this version; remove it, and give regions and centres as they are in the pictures"
    elif kind == "extra_forbidden":
        text = f"unknown; {nearest(str(path[-1]), siblings)} Correct or remove it"
    elif kind == "union_tag_not_found":
        text = f"is missing; add it, one of the known kinds: {', '.join(KINDS)}"
    elif kind == "union_tag_invalid":
        text = f'"{ctx["tag"]}" is not available in this version; known kinds: {", ".join(KINDS)}'
    elif kind == "missing" and isinstance(first["loc"][-1], str):
        text = f"is missing; add it. It means: {about}"
    else:
        wanted = _wanted(group)
        text = f"{wanted}{'' if wanted.endswith('?') else '.'} It means: {about}"
    return text


def _wanted(group: list[ErrorDetails]) -> str:
    value = group[0]["input"]
    wanted = " or ".join(dict.fromkeys(_rule(details) for details in group))
    shown = json.dumps(value, ensure_ascii=False, default=str)
    text = f"must be {wanted}, got {shown if len(shown) < _SHOWN else shown[:_SHOWN] + '...'}"
    options = [o for e in group if e["type"] == "literal_error" for o in re.findall(r"'([^']+)'", e["ctx"]["expected"])]
    near = get_close_matches(value, options, n=1) if isinstance(value, str) else []
    return f"{text}; did you mean {near[0]!r}?" if near else text


_RULES: dict[str, Callable[[dict[str, Any]], str]] = {
    "literal_error": lambda ctx: str(ctx["expected"]),
    "float_type": lambda _: "a number",
    "finite_number": lambda _: "a finite number",
    "int_type": lambda _: "a whole number",
    "int_from_float": lambda _: "a whole number",
    "string_type": lambda _: "text in quotes",
    "string_too_short": lambda _: "text that is not empty",
    "bool_type": lambda _: "true or false",
    "greater_than": lambda ctx: f"more than {ctx['gt']:g}",
    "greater_than_equal": lambda ctx: f"at least {ctx['ge']:g}",
    "less_than": lambda ctx: f"less than {ctx['lt']:g}",
    "less_than_equal": lambda ctx: f"at most {ctx['le']:g}",
    "tuple_type": lambda _: "a list in [ ]",
    "list_type": lambda _: "a list in [ ]",
    "too_short": lambda ctx: f"a list of at least {ctx['min_length']}",
    "too_long": lambda ctx: f"a list of at most {ctx['max_length']}",
    "missing": lambda _: "a longer list",
    "dict_type": lambda _: "a table of keys",
    "model_type": lambda _: "a table of keys",
    "model_attributes_type": lambda _: "a table of keys",
}


def _rule(details: ErrorDetails) -> str:
    rule = _RULES.get(details["type"])
    return rule(details.get("ctx", {})) if rule else f"other ({details['msg']})"


def _table(schema: dict[str, Any], path: Path, raw: object) -> dict[str, Any]:
    """Return the part of the JSON Schema that describes the table at a path."""
    node, here = schema, raw
    for part in (*path, None):
        while True:
            if "$ref" in node:
                node = schema["$defs"][node["$ref"].rpartition("/")[2]]
            elif "oneOf" in node and isinstance(here, dict):
                node = (
                    {"$ref": kinds[kind]}
                    if (kind := str(here.get("kind"))) in (kinds := node["discriminator"]["mapping"])
                    else {}
                )
            elif "anyOf" in node:
                node = next((option for option in node["anyOf"] if option.get("type") != "null"), {})
            else:
                break
        if part is None:
            break
        if isinstance(part, int):
            node = node.get("items", {})
        else:
            node = node.get("properties", {}).get(part) or node.get("additionalProperties") or {}
        here = here[part]  # type: ignore[index]
    return node
