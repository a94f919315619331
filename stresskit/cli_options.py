"""Options that the commands of the analyses share, and their progress lines. Light: nothing heavy is imported."""

from __future__ import annotations

import sys
from pathlib import Path
from typing import Annotated

from cyclopts import Parameter

StudyPath = Annotated[Path, Parameter(help="the study's YAML file")]
Out = Annotated[Path | None, Parameter(help="folder to write tables and a report to; must not exist yet")]
Models = Annotated[Path | None, Parameter(help="fitted models to read instead of fitting the study")]
Replace = Annotated[bool, Parameter(negative=(), help="overwrite an earlier folder")]
AsJson = Annotated[bool, Parameter(name="--json", negative=(), help="print the result as JSON")]


def say(what: str) -> None:
    """Progress on stderr, off when stderr is not a terminal."""
    if sys.stderr.isatty():
        print(what, file=sys.stderr)
