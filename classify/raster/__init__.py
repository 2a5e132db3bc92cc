"""See DEVELOPERS.md for what this room holds."""

import os

# The raster library keeps decoded tiles in memory, by default a twentieth of the machine's: too much where many workers
# share one, and more the larger the machine. Read once, when it first opens a file. In MiB.
os.environ.setdefault("GDAL_CACHEMAX", "128")
