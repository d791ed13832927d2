"""Reading a run folder back."""

from __future__ import annotations

from pathlib import Path

import geopandas as gpd
import numpy as np
import pytest
import shapely
import xarray as xr
from test_controller_without_screen import statement

from planum.errors import SurveyError
from planum.outputs.netcdf import write_netcdf
from planum.viewer.load import load_run, statements_of
