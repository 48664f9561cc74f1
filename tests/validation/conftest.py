"""The scripts of this folder import each other as they do when run by hand."""

import sys
from pathlib import Path

sys.path.insert(0, str(Path(__file__).parent))
