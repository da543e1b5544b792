"""Write anew what documents quote from the program: ``python tests/renew.py``."""

from __future__ import annotations

import re
from pathlib import Path

import mixbridge

ROOT = Path(__file__).parents[1]
SCREEN = re.compile(r"(?<=^```text\n).*?(?=^```)", flags=re.DOTALL | re.MULTILINE)


def screen() -> str:
    """Return the first screen of the demonstration."""
    data = mixbridge.demo.apiaries()
    return f"{mixbridge.crosscheck('honey ~ forage + feeding + altitude', data, unit='apiary', period='season')}\n"


def renewed(text: str) -> str:
    """Return a document with its quoted screen replaced by the current one."""
    return SCREEN.sub(lambda _: screen(), text, count=1)


if __name__ == "__main__":
    for path in (ROOT / "README.md",):
        path.write_text(renewed(path.read_text(encoding="utf-8")), encoding="utf-8")
