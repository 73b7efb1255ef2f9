"""Numbers as people write them: significant digits, thousands apart, no powers of ten for what is large."""

from __future__ import annotations

import math


def plain(value: float, digits: int = 6) -> str:
    """So many significant digits; a number of thousands and more is written out. Very small ones keep a power of ten.

    >>> plain(1268.0, 3), plain(0.0123456, 3), plain(-1234.5), plain(2.0), plain(-1.6e7, 2), plain(1.2e-7, 3)
    ('1,270', '0.0123', '-1,234.5', '2', '-16,000,000', '1.2e-07')
    """
    text = f"{value:.{digits}g}"
    if not math.isfinite(value) or abs(float(text)) < 1000.0:
        return text
    decimals = max(digits - 1 - math.floor(math.log10(abs(float(text)))), 0)
    written = f"{float(text):,.{decimals}f}"
    return written.rstrip("0").rstrip(".") if "." in written else written
