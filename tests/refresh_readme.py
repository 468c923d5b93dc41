"""Write the README's generated parts anew: real cards, the real table, the readings."""

from __future__ import annotations

import re
import subprocess
import sys
from pathlib import Path

from patternscore.keys import GROUPS, keys_of

ROOT = Path(__file__).resolve().parent.parent
README = ROOT / "README.md"
_OUTPUT = re.compile(r"(<!-- output: (?P<command>.+?) -->\n```text\n)(?P<text>.*?)(```\n)", re.DOTALL)


def printed(command: str) -> str:
    """What a command prints into a pipe of 80 columns."""
    import os

    run = subprocess.run(
        [sys.executable, "-m", "patternscore", *command.split()],
        cwd=ROOT,
        env={**os.environ, "COLUMNS": "80", "PYTHONIOENCODING": "utf-8"},
        capture_output=True,
        check=True,
    )
    return "".join(line.rstrip() + "\n" for line in run.stdout.decode("utf-8").splitlines())


def outputs(text: str) -> list[tuple[str, str]]:
    """Commands in the README and what it says they print."""
    return [(match["command"], match["text"]) for match in _OUTPUT.finditer(text)]


def keys_table() -> str:
    """All readings of the contract, as a Markdown table."""
    rows = ["| group | key | unit | meaning |", "| --- | --- | --- | --- |"]
    for group in GROUPS:
        rows += [f"| {group} | `{key.name}` | {key.unit} | {key.meaning} |" for key in keys_of(group)]
    return "\n".join(rows)


def refreshed(text: str) -> str:
    """README with its generated parts made now."""
    text = _OUTPUT.sub(lambda match: match[1] + printed(match["command"]) + match[4], text)
    return re.sub(r"<!-- keys -->\n.*?\n(?=Levels:)", f"<!-- keys -->\n\n{keys_table()}\n\n", text, flags=re.DOTALL)


if __name__ == "__main__":
    README.write_text(refreshed(README.read_text("utf-8")), encoding="utf-8")
