"""What the arithmetic of a process depends on besides versions: our code, the linear algebra library, the processor."""

from __future__ import annotations

import hashlib
from functools import cache
from pathlib import Path
from typing import Any

import numpy as np
import scipy.linalg  # noqa: F401 - brings its own BLAS, which is loaded with it
from threadpoolctl import threadpool_info

from stresskit.kernels.blocks import processors

#: Parts of the package that a result or its report is made from.
_CODE = ("*.py", "*.j2", "*.css", "*.js")
#: What threadpoolctl says of a library that can change the last bits of a product.
_LIBRARY = ("user_api", "internal_api", "version", "architecture", "threading_layer")


@cache
def code_digest() -> str:
    """sha256 over every source file of the package, by name and content: a version number can stand for many states."""
    root = Path(__file__).parents[1]
    h = hashlib.sha256()
    for file in sorted({f for pattern in _CODE for f in root.rglob(pattern)}):
        h.update(file.relative_to(root).as_posix().encode() + b"\0")
        # line ends as an installer may have changed them
        h.update(file.read_bytes().replace(b"\r\n", b"\n") + b"\0")
    return h.hexdigest()


def linear_algebra() -> list[dict[str, str]]:
    """BLAS libraries that are loaded, each once: library, version, the processor it chose its loops for."""
    found = [
        {key: str(info[key]) for key in _LIBRARY if info.get(key) is not None}
        for info in threadpool_info()
        if info.get("user_api") == "blas"
    ]
    return [dict(pairs) for pairs in sorted({tuple(sorted(f.items())) for f in found})]


def build() -> dict[str, Any]:
    """code, blas, cpu (instruction sets that numpy uses), threads (for information: no figure depends on them)."""
    config: Any = np.show_config(mode="dicts")
    simd = config.get("SIMD Extensions", {})
    threads = {"processors": processors()} | {
        f"blas_{k}": int(info["num_threads"])
        for k, info in enumerate((i for i in threadpool_info() if i.get("user_api") == "blas"), start=1)
    }
    return {
        "code": code_digest(),
        "blas": linear_algebra(),
        "cpu": sorted({*simd.get("baseline", ()), *simd.get("found", ())}),
        "threads": threads,
    }
