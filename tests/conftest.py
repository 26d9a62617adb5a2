"""What all tests share."""

import sys
from pathlib import Path

# Makes `from toys import ...` work from every folder of tests.
sys.path.insert(0, str(Path(__file__).parent))


def pytest_addoption(parser):
    parser.addoption(
        "--kills",
        type=int,
        default=16,
        metavar="N",
        help="how many processes tests/faults kills at random moments (default 16)",
    )
