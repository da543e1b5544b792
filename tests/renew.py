"""Write anew what documents quote from the program: ``python tests/renew.py``."""

from __future__ import annotations

import contextlib
import io
import re
from pathlib import Path

import mixbridge
from mixbridge.report.figures import svg

ROOT = Path(__file__).parents[1]
PICTURE = ROOT / "docs" / "ledger.svg"
WORKED_PAGE = ROOT / "docs" / "worked.md"
WORKED = re.compile(r"^```python\n(?P<code>.*?)^```\n\n```text\n.*?^```", flags=re.DOTALL | re.MULTILINE)
SCREEN = re.compile(r"(?<=^```text\n).*?(?=^```)", flags=re.DOTALL | re.MULTILINE)


def screen() -> str:
    """Return the first screen of the demonstration."""
    data = mixbridge.demo.apiaries()
    return f"{mixbridge.crosscheck('honey ~ forage + feeding + altitude', data, unit='apiary', period='season')}\n"


def picture() -> str:
    """Return the picture of the README: the ledger of one term of the demonstration."""
    data = mixbridge.demo.apiaries()
    study = mixbridge.crosscheck("honey ~ forage + feeding + altitude", data, unit="apiary", period="season")
    lines = svg(study, "ledger", term="feeding").splitlines()
    return "\n".join(line.rstrip() for line in lines) + "\n"


def worked(text: str) -> str:
    """Return the worked study with its printed outputs replaced by the current ones."""
    names: dict[str, object] = {}

    def again(match: re.Match[str]) -> str:
        shown = io.StringIO()
        with contextlib.redirect_stdout(shown):
            exec(match["code"], names)
        return f"```python\n{match['code']}```\n\n```text\n{shown.getvalue().rstrip()}\n```"

    return WORKED.sub(again, text)


def renewed(text: str) -> str:
    """Return a document with its quoted screen replaced by the current one."""
    return SCREEN.sub(lambda _: screen(), text, count=1)


if __name__ == "__main__":
    for path in (ROOT / "README.md",):
        path.write_text(renewed(path.read_text(encoding="utf-8")), encoding="utf-8")
    PICTURE.write_text(picture(), encoding="utf-8")
    WORKED_PAGE.write_text(worked(WORKED_PAGE.read_text(encoding="utf-8")), encoding="utf-8")
