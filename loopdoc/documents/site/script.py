"""Scripts and data inside a page of the site, and the policy that lets the browser run those scripts and nothing else.

The register's text reaches a script only as a JSON data block, which no browser executes.
"""

from __future__ import annotations

import base64
import hashlib
import json
from functools import lru_cache
from typing import Any

from markupsafe import Markup

from loopdoc.documents.rendering import template_text

_IN_A_PAGE = str.maketrans({character: f"\\u{ord(character):04x}" for character in "<>&\u2028\u2029"})


@lru_cache(maxsize=8)
def script(name: str) -> Markup:
    """A script of the package, to stand between the tags of a script element as it is."""
    text = template_text(name)
    if "</" in text or "<!--" in text:
        raise ValueError(f"{name} would end its own element")
    return Markup(text)


@lru_cache(maxsize=8)
def policy(name: str) -> str:
    """Content security policy of a page with this script (of one without, where the name is empty).

    A page opened from disk has no origin, so that a script file beside it could not be told from any other: only
    the hash of what stands in the page itself does.
    """
    allowed = "'none'"
    if name:
        digest = hashlib.sha256(script(name).encode()).digest()
        allowed = f"'sha256-{base64.b64encode(digest).decode()}'"
    return (
        f"default-src 'none'; script-src {allowed}; style-src 'self' file: 'unsafe-inline'; font-src data:; "
        "img-src data:; base-uri 'none'; form-action 'none'"
    )


def data_block(content: Any) -> Markup:
    """JSON to stand between the tags of a data block: nothing in it can end the element."""
    text = json.dumps(content, ensure_ascii=False, separators=(",", ":"), allow_nan=False)
    return Markup(text.translate(_IN_A_PAGE))
