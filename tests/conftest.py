"""What all tests share."""

import sys
from pathlib import Path

# Makes `from toys import ...` work from every folder of tests.
sys.path.insert(0, str(Path(__file__).parent))
