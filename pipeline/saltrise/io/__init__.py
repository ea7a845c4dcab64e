"""Everything that opens a file."""

# First of all: GDAL reads its settings from the environment once.
from saltrise.io import gdal as gdal
