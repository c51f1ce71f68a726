"""The JSON document: one frame for every verb, SI base units, plain numbers, never NaN."""

from __future__ import annotations

import json
import math
from collections.abc import Mapping, Sequence
from typing import Any

from loopsim._version import __version__

SCHEMA = "loopsim/1"


def plain(value: Any) -> Any:
    """`value` in the types that JSON has. Arrays become lists, complex numbers [re, im], what is not finite null."""
    if value is None or isinstance(value, str | bool):
        return value
    if hasattr(value, "tolist"):  # NumPy arrays and scalars, without importing NumPy
        return plain(value.tolist())
    if isinstance(value, int):
        return value
    if isinstance(value, float):
        return value if math.isfinite(value) else None
    if isinstance(value, complex):
        return [plain(value.real), plain(value.imag)]
    if isinstance(value, Mapping):
        return {str(key): plain(item) for key, item in value.items()}
    if isinstance(value, Sequence | set | frozenset):
        return [plain(item) for item in value]
    if hasattr(value, "to_dict"):
        return plain(value.to_dict())
    raise TypeError(f"no JSON form for {type(value).__name__}")


def document(
    verb: str,
    payload: Mapping[str, Any],
    *,
    circuit: str | None = None,
    file: str | None = None,
    settings: Mapping[str, Any] | None = None,
) -> dict[str, Any]:
    """The whole document of one answer: the frame first, then what the verb found."""
    frame = {
        "schema": SCHEMA,
        "verb": verb,
        "circuit": circuit,
        "file": file,
        "settings": settings or {},
        "version": __version__,
    }
    body = {key: value for key, value in payload.items() if key not in frame}
    return {key: plain(value) for key, value in {**frame, **body}.items()}


def document_text(whole: Mapping[str, Any]) -> str:
    """The document as text with a line end; ASCII only, so that no name can act on a terminal."""
    text = json.dumps(whole, indent=2, ensure_ascii=True, allow_nan=False)
    return text.replace("\x7f", "\\u007f") + "\n"
