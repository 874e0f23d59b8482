"""What the firmware's own tests set up is used here as well."""

import sys
from pathlib import Path

sys.path.insert(0, str(Path(__file__).parents[1] / "device"))
