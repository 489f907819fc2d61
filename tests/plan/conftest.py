"""The invented light curves of the distance room serve plans too."""

import sys
from pathlib import Path

sys.path.append(str(Path(__file__).parents[1] / "candles"))
