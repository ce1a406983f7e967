"""The briefing page: one HTML file that stands alone, for a wall screen, a phone and A4 print.

=====================  ==========================================================
``briefing``           the record that page and sheet are made from
``versions_table``     how two versions compare, from the folder of a comparison
``error_rows``         which of them errs less
``naming``             names of variables that can be told apart
``standing``           tonight against what is usual, in words
``clock``              leads as times of day and as ticks of an axis
``lanes``              the shortest limits as lanes over one lead axis
``limit_rows``         the table of all limits
``curve_plot``         growth curves as lines of an SVG
``curve_words``        growth curves in words
``map_picture``        a map as a picture that fills its box
``map_figure``         the same with legend, scale, names and words
``readings``           what a map reads out under the pointer
``policy``             the content policy, and data inside a page
``rendering``          all of it set into the template
``page``               the file
=====================  ==========================================================
"""

from __future__ import annotations

from ensemble_horizon.products.page.briefing import Briefing
from ensemble_horizon.products.page.page import write_page
from ensemble_horizon.products.page.versions_table import VersionsTable, read_versions

__all__ = ["Briefing", "VersionsTable", "read_versions", "write_page"]
