"""Products: datasets in; CSV, CF NetCDF and PNG out, each file whole or not at all.

No statistics are done here. Plotting libraries load when a figure is drawn, not before.

=================  =============================================================
``writing``        files that appear whole or not at all
``wording``        plain words for horizons, leads and starts
``limits``         one record per start, variable, place and criterion
``rows``           rows of a table as CSV
``tables``         ``horizons.csv`` and the table for the terminal
``netcdf``         names, attributes and variables of the NetCDF products
``curve_file``     ``horizons.nc``
``map_grid``       grids in the maps file
``map_file``       ``horizon_maps.nc``, start by start
``places``         outlines and sites on a map
``coast``          coastlines
``view``           the grid point under each pixel of a map
``hour_scale``     colours and hatches
``isolines``       contour lines and their labels
``sheet``          a figure measured in pixels
``map_legend``     what stands around a map
``map_ground``     what every map stands on
``maps``           horizon maps
``panel_grid``     panels in rows and columns on a sheet
``curve_panel``    one panel of growth curves
``curve_figures``  growth curves, place by place
``drawing``        the figures, one record each
``folder``         all products together
``gains``          hours gained: one record per variable, place and criterion
``gains_table``    ``versions.csv`` and the table for the terminal
``difference_table`` ``score_differences.csv`` and the table for the terminal
``gains_file``     ``versions.nc``
``difference_file`` differences of scores in it
``difference_figure`` the same by lead, with intervals
``gains_figure``   hours gained with intervals
``gain_maps``      maps of hours gained
``share_table``    ``time_to_limit.csv``
``share_figures``  time to the limit over many starts
``versions_folder`` all products of a comparison together
``scores``         scores and skill limits: one record each
``score_table``    ``scores.csv``, ``skill_limits.csv`` and tables for the terminal
``score_file``     ``scores.nc`` and ``score_maps.nc``
``score_panel``    one panel of scores by lead
``score_figures``  scores by lead, and ranks
``score_folder``   all products of a verification together
``sealed``         files of an archive: sealed, and set aside where they are broken
``score_sums``     sums of the scores of one start, filed
``score_sentences`` past scores in a sentence or two
``calibration_file`` factors from spread to error
``origin``         names and attributes as they were, in the NetCDF products
``stored``         ``horizons.nc`` and ``horizon_maps.nc`` read back
``nights``         limits of one night, as they are compared with other nights
``night_file``     one night in the archive
``fitted_text``    words cut and broken to their room
``paper``          a sheet of A4 as PDF
``sheet_table``    limits as rows on paper
``sheet_pdf``      a briefing on one sheet
``page``           the briefing page
``run_archive``    run files and analyses of a rehearsal
``archive_folder`` what stands where in its archive
=================  =============================================================
"""

from __future__ import annotations

from ensemble_horizon.products.coast import coastlines
from ensemble_horizon.products.curve_file import write_horizon_file
from ensemble_horizon.products.difference_table import difference_table
from ensemble_horizon.products.drawing import Drawing, draw_in_turn, load_plotting
from ensemble_horizon.products.folder import moved_together, write_products
from ensemble_horizon.products.gains import gains, starts_words, summary_words
from ensemble_horizon.products.gains_table import gains_table
from ensemble_horizon.products.limits import Limit, VariableResult, limits
from ensemble_horizon.products.map_file import MapFile, map_file, write_map_file
from ensemble_horizon.products.places import Ground, PlaceMark
from ensemble_horizon.products.tables import limits_table, write_horizon_table
from ensemble_horizon.products.versions_folder import write_versions
from ensemble_horizon.products.writing import written_whole

__all__ = [
    "Drawing",
    "Ground",
    "Limit",
    "MapFile",
    "PlaceMark",
    "VariableResult",
    "coastlines",
    "difference_table",
    "draw_in_turn",
    "gains",
    "gains_table",
    "limits",
    "limits_table",
    "load_plotting",
    "map_file",
    "moved_together",
    "starts_words",
    "summary_words",
    "write_horizon_file",
    "write_horizon_table",
    "write_map_file",
    "write_products",
    "write_versions",
    "written_whole",
]
