"""Files to exposures and templates, and back: FITS, HDF5, ECSV, text. No science."""

from xcorr.io.reading import read_cube, read_exposure, read_spectrum, read_template
from xcorr.io.writing import LAYOUTS, write_cube

__all__ = ["LAYOUTS", "read_cube", "read_exposure", "read_spectrum", "read_template", "write_cube"]
