"""The content policy of the page, and data inside it.

Nothing is fetched, nothing is sent, and only the style and the script that the program itself put
into the page are honoured: whatever a name from a file might smuggle in stays text.
"""

from __future__ import annotations

import base64
import hashlib
import json
from collections.abc import Mapping
from typing import Any

import numpy as np

_ESCAPES = {ord(sign): f"\\u{ord(sign):04x}" for sign in "<>&\u2028\u2029"}


def content_policy(style: str, script: str) -> str:
    """Return the policy that allows one style and one script by their digests (CSP level 2).

    Parameters
    ----------
    style, script : str
        Text between the tags, to the letter.
    """
    return "; ".join(
        (
            "default-src 'none'",
            "img-src data:",
            f"style-src '{_digest(style)}'",
            f"script-src '{_digest(script)}'",
            "base-uri 'none'",
            "form-action 'none'",
        )
    )


def embedded_json(data: Mapping[str, Any]) -> str:
    """Return JSON that cannot end the element it stands in.

    Examples
    --------
    >>> embedded_json({"name": "</script>"})
    '{"name":"\\\\u003c/script\\\\u003e"}'
    """
    text = json.dumps(data, ensure_ascii=True, allow_nan=False, separators=(",", ":"))
    return text.translate(_ESCAPES)


def packed(values: np.ndarray) -> str:
    """Return an array as base64 of its bytes, low byte first."""
    return base64.b64encode(values.astype(values.dtype.newbyteorder("<")).tobytes()).decode()


def data_uri(picture: bytes) -> str:
    """Return a PNG as the address of itself."""
    return f"data:image/png;base64,{base64.b64encode(picture).decode()}"


def _digest(text: str) -> str:
    raw = hashlib.sha256(text.encode("utf-8")).digest()
    return f"sha256-{base64.b64encode(raw).decode()}"
