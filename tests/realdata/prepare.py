"""Put the real-input study into a folder, next to its inputs: python tests/realdata/prepare.py OUT

The inputs lie beside the repository and are not part of it: they are looked for in the ``data`` folder of
the path that STRESSKIT_SHARED names, else in ../shared/data seen from the repository.
"""

from __future__ import annotations

import os
import shutil
import sys
from pathlib import Path

HERE = Path(__file__).resolve().parent
REPOSITORY = HERE.parent.parent
NEEDED = (
    "small_business_loans.csv",
    "us_supervisory_2025/2025-Table_1A_Historic_Domestic.csv",
    "us_supervisory_2025/2025-Table_2A_Supervisory_Baseline_Domestic.csv",
    "us_supervisory_2025/2025-Table_3A_Supervisory_Severely_Adverse_Domestic.csv",
)


class InputsMissing(Exception):
    """The real inputs are not where they should be."""


def inputs_folder() -> Path:
    """Folder that holds every file in NEEDED. Raises InputsMissing naming the folder and the files it lacks."""
    shared = os.environ.get("STRESSKIT_SHARED")
    folder = (Path(shared) if shared else REPOSITORY.parent / "shared") / "data"
    lacking = [name for name in NEEDED if not (folder / name).is_file()]
    if lacking:
        raise InputsMissing(
            f"{folder} lacks {', '.join(lacking)}; set STRESSKIT_SHARED to the folder whose 'data' holds them"
        )
    return folder.resolve()


def prepare(folder: Path) -> Path:
    """Copies the study and its scenarios into ``folder``, links ``inputs``; returns the study file."""
    source = inputs_folder()
    shutil.copytree(HERE / "small_business", folder, dirs_exist_ok=True)
    link = folder / "inputs"
    if link.is_symlink():
        link.unlink()
    link.symlink_to(source, target_is_directory=True)
    return folder / "study.yaml"


def main(arguments: list[str]) -> int:
    if len(arguments) != 1:
        print("usage: python tests/realdata/prepare.py OUT", file=sys.stderr)
        return 2
    try:
        print(prepare(Path(arguments[0])))
    except InputsMissing as missing:
        print(f"real inputs missing: {missing}", file=sys.stderr)
        return 4
    return 0


if __name__ == "__main__":
    sys.exit(main(sys.argv[1:]))
