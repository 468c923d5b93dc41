"""TOML files that people write: read with one-line messages, and where in the text each entry stands."""

from __future__ import annotations

import re
import tomllib
from pathlib import Path
from typing import Any

from patternscore.errors import UsageError
from patternscore.files import read_bytes, shown

LARGEST = 512 * 1024  # bytes: a plan has some tens of thousands
Place = tuple[str | int, ...]

_TOKEN = re.compile(
    r'"""(?:\\.|[^\\])*?"{3,5}|\'\'\'.*?\'{3,5}'  # long strings
    r'|"(?:\\.|[^"\\\n])*"|\'[^\'\n]*\''  # short ones
    r"|\#[^\n]*|\n|[\[\]{},=]"
    r"|[^\s\[\]{},=#\"']+|\s",
    re.DOTALL,
)
_NESTED = re.compile(r"(?:[\w\"'-]{1,64}+[ \t]*+\.[ \t]*+){20}")  # dotted keys so long take minutes to parse
_HEAD = re.compile(r"[ \t]*(\[\[?)([^\[\]\n]*)\]")


def read_toml(path: Path | str, wanted: str) -> tuple[dict[str, Any], str]:
    """Content and text of a TOML file.

    Parameters
    ----------
    path : Path
    wanted : str
        What the file should be, for messages: "plan", "limits file".

    Raises
    ------
    UsageError
        When it cannot be read, is too large, or is no TOML.
    """
    data = read_bytes(path, LARGEST, wanted, UsageError)
    name = shown(Path(path).name)
    try:
        text = data.decode("utf-8-sig").replace("\r\n", "\n")
    except UnicodeDecodeError:
        raise UsageError(f"{name}: is no text; name a {wanted} in TOML") from None
    return parse(text, name), text


def parse(text: str, name: str) -> dict[str, Any]:
    """Content of TOML text; ``name`` is used in messages.

    Raises
    ------
    UsageError
        When it is no TOML; the message names the line.
    """
    if _NESTED.search(text):
        raise UsageError(f"{name}: has keys within keys without end; name a file as patternscore writes it")
    try:
        return tomllib.loads(text)
    except tomllib.TOMLDecodeError as error:
        match = re.fullmatch(r"(.*) \(at (?:line (\d+), column \d+|end of document)\)", str(error), re.DOTALL)
        what, line = (match[1], match[2]) if match else (str(error), None)
        what = shown(" ".join(what.split()))[:100]
        line = line or str(text.count("\n") + 1)
        raise UsageError(f"{name} line {line}: is not TOML ({what}); mend that line") from None
    except (RecursionError, ValueError):  # brackets within brackets without end; whole numbers of thousands of digits
        raise UsageError(f"{name}: has brackets or digits without end; name a file as patternscore writes it") from None


def lines_of(text: str) -> dict[Place, int]:
    """Line of every key, table and array element of TOML text that is known to be right.

    Returns
    -------
    dict
        From the way to an entry, such as ``("edges", 3, "start", 1)``, to its line; the first line is 1.
    """
    found: dict[Place, int] = {(): 1}
    base: Place = ()
    counts: dict[Place, int] = {}
    at, line = 0, 1
    while at < len(text):
        head = _HEAD.match(text, at)
        if head:
            base = _keys(head[2])
            if head[1] == "[[":
                counts[base] = counts.get(base, -1) + 1
                found.setdefault(base, line)
                base = (*base, counts[base])
            found.setdefault(base, line)
            at = head.end()
        at, line = _statement(text, at, line, base, found)
    return found


def _statement(text: str, at: int, line: int, base: Place, found: dict[Place, int]) -> tuple[int, int]:
    """Take one line, or all lines of a value that spans several; gives where it ends."""
    path, ways = base, list[tuple[Place, int]]()  # ways: the arrays (with their count) and tables (-1) around
    key = ""
    while at < len(text):
        match = _TOKEN.match(text, at)
        token = match[0] if match else text[at]
        at += len(token)
        if token == "\n" and not ways:
            return at, line + 1
        if token == "=":
            path = (*(ways[-1][0] if ways else base), *_keys(key))
            found.setdefault(path, line)
            key = ""
        elif token in "[{":
            path = _in_array(ways, path, found, line)
            ways.append((path, 0 if token == "[" else -1))
        elif token in "]}" and ways:
            ways.pop()
        elif token == "," and ways:
            around, count = ways[-1]
            ways[-1] = around, count + 1 if count >= 0 else -1
            key = ""
        elif not token.isspace() and token[0] != "#":
            key += token
            _in_array(ways, path, found, line)
        line += token.count("\n")
    return at, line


def _in_array(ways: list[tuple[Place, int]], path: Place, found: dict[Place, int], line: int) -> Place:
    """Way to the value that begins here: an element's, where it stands in an array."""
    if ways and ways[-1][1] >= 0:
        path = (*ways[-1][0], ways[-1][1])
        found.setdefault(path, line)
    return path


def _keys(text: str) -> Place:
    """Parts of a dotted key, without their quotes."""
    parts = re.findall(r'"(?:\\.|[^"\\])*"|\'[^\']*\'|[^.\s"\']+', text)
    return tuple(part[1:-1] if part[0] in "\"'" else part for part in parts)
