"""Drawing of chart documents: the script that browsers draw with, and pictures for where no script runs.

Everything comes from the installed packages; nothing is fetched from a network.
"""

from __future__ import annotations

import gzip
import hashlib
from dataclasses import dataclass
from functools import cache

import vl_convert

from registry.web.charts import Document

#: The minor version of the chart grammar that both the script and the pictures follow.
GRAMMAR = "6.4"


@dataclass(frozen=True)
class Script:
    """The drawing script as served: its bytes packed, and a name that changes with them."""

    packed: bytes
    plain: bytes
    digest: str


@cache
def script() -> Script:
    """The bundle that draws charts in a browser; made once a process (about two seconds)."""
    plain = vl_convert.javascript_bundle("window.drawChart = vegaEmbed;", vl_version=GRAMMAR).encode()
    return Script(gzip.compress(plain, 6, mtime=0), plain, hashlib.sha256(plain).hexdigest()[:16])


def picture(document: Document) -> str:
    """A chart document as SVG."""
    return vl_convert.vegalite_to_svg(document, vl_version=GRAMMAR)
