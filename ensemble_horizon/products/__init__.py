"""Products: datasets in; CSV, CF NetCDF and PNG out, each file whole or not at all.

No statistics are done here. Plotting libraries load when a figure is drawn, not before.

=================  =============================================================
``writing``        files that appear whole or not at all
``wording``        plain words for horizons, leads and starts
``limits``         one record per start, variable, place and criterion
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
``maps``           horizon maps
``curve_panel``    one panel of growth curves
``curve_figures``  growth curves, place by place
``drawing``        the figures, one record each
``folder``         all products together
``run_archive``    run files and analyses of a rehearsal
``archive_folder`` what stands where in its archive
=================  =============================================================
"""

from __future__ import annotations

from ensemble_horizon.products.coast import coastlines
from ensemble_horizon.products.curve_file import write_horizon_file
from ensemble_horizon.products.drawing import Drawing, draw_in_turn, load_plotting
from ensemble_horizon.products.folder import moved_together, write_products
from ensemble_horizon.products.limits import Limit, VariableResult, limits
from ensemble_horizon.products.map_file import MapFile, map_file, write_map_file
from ensemble_horizon.products.places import PlaceMark
from ensemble_horizon.products.tables import limits_table, write_horizon_table
from ensemble_horizon.products.writing import written_whole

__all__ = [
    "Drawing",
    "Limit",
    "MapFile",
    "PlaceMark",
    "VariableResult",
    "coastlines",
    "draw_in_turn",
    "limits",
    "limits_table",
    "load_plotting",
    "map_file",
    "moved_together",
    "write_horizon_file",
    "write_horizon_table",
    "write_map_file",
    "write_products",
    "written_whole",
]
