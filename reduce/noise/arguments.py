"""The options of ``eddyshed noise``, apart from its work so that --help is fast."""

from __future__ import annotations

from pathlib import Path
from typing import Any


def add_noise(commands: Any) -> None:
    """Add the command that fits noise to a series of the user's own."""
    noise = commands.add_parser(
        "noise",
        help="fit noise to a series of your own, and test what it assumes",
        allow_abbrev=False,
    )
    noise.add_argument("series", type=Path, help="an HDF5, netCDF-4 or CSV file")
    noise.add_argument(
        "--variable",
        action="append",
        required=True,
        metavar="NAME",
        help="variable or column; may be given several times",
    )
    noise.add_argument("--time", metavar="NAME", help="variable or column of times")
    noise.add_argument(
        "--time-unit", metavar="UNIT", help="unit of the times, if the file has none"
    )
    noise.add_argument(
        "--step", metavar="QUANTITY", help='time between even samples, such as "1 d"'
    )
    noise.add_argument(
        "--method",
        choices=("integral", "product", "likelihood", "regression"),
        default="integral",
        help="what is fitted (default: integral of the lag covariance)",
    )
    noise.add_argument(
        "--structure",
        choices=("auto", "real diagonal", "complex diagonal", "full"),
        default="auto",
        help="form of the rate matrix; complex diagonal: variables two by two are the "
        "parts of waves (default: by the length of the record)",
    )
    noise.add_argument(
        "--window", metavar="QUANTITY", help="longest lag (integral, product)"
    )
    noise.add_argument("--lag", metavar="QUANTITY", help="the lag (regression)")
    noise.add_argument(
        "--figure", type=Path, metavar="FILE", help="draw it: .png, .svg or .pdf"
    )
    noise.add_argument(
        "--json", action="store_true", help="print JSON (in SI) instead of a table"
    )
