"""The kinds of ``[resolved]`` in a config: how the kept modes are chosen."""

from __future__ import annotations

from dataclasses import dataclass

from eddyshed.solver.boxes import BoxSettings
from eddyshed.solver.config import setting
from eddyshed.solver.inner_products import INNER_PRODUCTS


def inner_product_setting() -> str:
    """Declare the key `inner_product`, the same for every kind of ``[resolved]``."""
    return setting(
        default="energy",
        choices=INNER_PRODUCTS,
        doc="product in which modes are orthonormal and variance is measured. energy; "
        "l2: mean square of the streamfunction; enstrophy: mean square of the "
        "potential vorticity; layers weighted by depth. A slice has energy alone",
    )


@dataclass(frozen=True, slots=True, kw_only=True)
class FourierSettings:
    """Keep chosen wavenumbers."""

    family: str = setting(
        default="isotropic",
        choices=("isotropic", "zonal", "listed"),
        doc="isotropic: all waves up to a total wavenumber; zonal: waves that do "
        "not vary in x; listed: those in `waves`",
    )
    up_to: float | None = setting(
        default=None,
        minimum=1,
        doc="largest wavenumber kept (isotropic, zonal), in waves per box where the "
        "space repeats and half waves between walls, the root of the sum of squares "
        "over the two directions",
    )
    waves: tuple[tuple[int, int], ...] = setting(
        default=(),
        doc="waves per box, or half waves between walls, in x and y, one pair for "
        "each wave (listed)",
    )
    inner_product: str = inner_product_setting()

    def problems(self):
        """Rules that go across keys."""
        if self.family == "listed":
            if not self.waves:
                yield 'family = "listed" needs waves, such as waves = [[0, 1], [1, 0]]'
            if self.up_to is not None:
                yield 'up_to has no meaning with family = "listed"; leave it out'
        else:
            if self.up_to is None:
                yield f'family = "{self.family}" needs up_to, such as up_to = 3'
            if self.waves:
                yield f'waves has no meaning with family = "{self.family}"'


@dataclass(frozen=True, slots=True, kw_only=True)
class EofSettings:
    """Keep the leading empirical orthogonal functions of the truth."""

    modes: int = setting(minimum=1, maximum=1000, doc="how many modes are kept")
    inner_product: str = inner_product_setting()


@dataclass(frozen=True, slots=True, kw_only=True)
class BoxesSettings:
    """Keep averages over rectangles, as instruments measure them."""

    boxes: dict[str, BoxSettings] = setting(
        doc="a rectangle and the field that is averaged over it, under a name"
    )
    inner_product: str = inner_product_setting()

    def problems(self):
        """Rules that go across keys."""
        if not self.boxes:
            yield "boxes is empty; write at least one table [resolved.boxes.NAME]"


@dataclass(frozen=True, slots=True, kw_only=True)
class FileSettings:
    """Keep vectors that a file holds, made orthonormal in their order."""

    path: str = setting(doc="an HDF5 or netCDF-4 file")
    variable: str = setting(
        default="vectors",
        doc="the variable in it, of shape (coordinate, mode), with the coordinates of "
        "a truth on this grid; split/resolved/vectors in a split.h5",
    )
    modes: int | None = setting(
        default=None, minimum=1, doc="how many are kept, from the first; absent: all"
    )
    inner_product: str = inner_product_setting()
