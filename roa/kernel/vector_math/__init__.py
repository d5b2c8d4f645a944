"""Elementary functions as straight-line arithmetic, which the compiler packs into vectors.

`math.sin` inside a lane loop is a call for every lane, and the loop loses its vectors without a
word (five to six times slower). So the functions are written here out of additions, products,
divisions, roots, selects and the bits of floats: no branch, no call, no conversion between 64-bit
integers and floats (which has no packed form before AVX-512; see `floats.py` for what stands in).

These files are not imported by generated code: `source` places their text in the generated module,
since numba's cache does not see changes in another file. A file that the loop does not use stays out.

Errors are at most 2 units in the last place, 4 for tan, atan2 and power, over all floats (circular
functions: to `REDUCIBLE`); zeros keep their sign, and subnormals, infinities and NaN give what IEEE
754 recommends. The polynomials are our own, by `scripts/fit_vector_math.py`.

Floating-point flags: `contract` alone. Re-association would undo the reductions.
"""

from __future__ import annotations

import re
from collections.abc import Iterable
from pathlib import Path

FILES = {
    "vsin": "circular", "vcos": "circular", "vtan": "circular",
    "vasin": "inverse_circular", "vacos": "inverse_circular", "vatan": "inverse_circular", "vatan2": "inverse_circular",
    "vexp": "exponential",
    "vsinh": "hyperbolic", "vcosh": "hyperbolic", "vtanh": "hyperbolic",
    "vlog": "logarithm",
    "vpower": "power",
}  # fmt: skip
"""Each function and the file that holds it."""

_OWN_IMPORT = re.compile(r"^from roa\.kernel\.vector_math\.(\w+) import .*\n", re.MULTILINE)


def source(functions: Iterable[str]) -> str:
    """Return the text that defines the functions, everything that they use, and `floats.py` always."""
    texts: dict[str, str] = {}
    for file in ("floats", *sorted({FILES[function] for function in functions})):
        _add(file, texts)
    return "\n\n".join(texts.values())


def _add(file: str, texts: dict[str, str]) -> None:
    text = Path(__file__).with_name(f"{file}.py").read_text(encoding="utf-8")
    for needed in _OWN_IMPORT.findall(text):
        if needed not in texts:
            _add(needed, texts)
    texts[file] = _OWN_IMPORT.sub("", text)
