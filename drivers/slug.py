"""A name turned into a part of a file name."""

from __future__ import annotations

import re
import unicodedata

LONGEST = 60


def slug_of(name: str) -> str:
    """ASCII, lower case, hyphens between words: "Hg 313 nm pair" gives "hg-313-nm-pair".

    Empty when the name holds no ASCII letter or digit, not even under an accent.
    """
    plain = unicodedata.normalize("NFKD", name).encode("ascii", "ignore").decode("ascii")
    return re.sub(r"[^a-z0-9]+", "-", plain.lower())[:LONGEST].strip("-")
