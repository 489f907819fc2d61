"""Everything that measuring a frame imports late, in one place: the server of the workers imports it before they are
forked, so that no frame waits for it. Nothing else may import this module.
"""

import importlib

LATE = (
    "astropy.io.fits",
    "astropy.units",
    "erfa",
    "numpy.ma",
    "scipy.fft",
    "scipy.interpolate",
    "scipy.ndimage",
    "scipy.optimize",
    "scipy.sparse",
    "scipy.spatial",
    "scipy.special",
    "scipy.stats",
    "reduce.measure.host",
    "reduce.pipeline",
)

for _name in LATE:
    importlib.import_module(_name)
