"""Let the tests of this folder import its known problems."""

import sys
from pathlib import Path

sys.path.append(str(Path(__file__).parent))
