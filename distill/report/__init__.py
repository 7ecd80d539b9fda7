"""One self-contained HTML page with pictures, from figures that other commands left; floor 7, no computing.

`layout` puts the page together from `pictures` and `tables`, which read one `Facts`; `charts` draws, `theme`
colours, `elements` and `words` know nothing of what they show.
"""

from __future__ import annotations

from distill.report.layout import front_svg, page, write_page
from distill.report.words import CAUTION

__all__ = ["CAUTION", "front_svg", "page", "write_page"]
