"""What a config asks for, brought to life and tried before anything is run."""

from __future__ import annotations

from typing import Any

from eddyshed.solver.boxes import box_averages
from eddyshed.solver.build import build_ocean
from eddyshed.solver.errors import DataError
from eddyshed.solver.exponential import stepper_of
from eddyshed.solver.hooks import Hook
from eddyshed.solver.truth import initial_state, random_forcing_of

from .bases.fourier import kept_coordinates
from .contract import check_model
from .homogenised import LARGEST
from .inner_products import in_product
from .member_blocks import check_series_memory
from .settings import EofSettings, FourierSettings, StudyConfig
from .split import prescribed_basis


def model_of(config: StudyConfig) -> Any:
    """Build the ocean of a study, seen in the inner product of its reduction.

    Raises
    ------
    DataError
        If a pattern does not fit the grid, or the product the ocean.
    """
    product = getattr(config.resolved, "inner_product", "energy")
    return in_product(build_ocean(config), product)


def preflight(config: StudyConfig) -> None:
    """Refuse now what would fail only after the truth was run.

    Parameters
    ----------
    config : StudyConfig
        The config.

    Raises
    ------
    DataError
        If a pattern, a band, a box or the basis does not fit the grid, or the inner
        product the ocean.
    ContractError
        If a user's own model or basis breaks its contract.
    """
    ocean = model_of(config)
    if isinstance(config.ocean, Hook):
        check_model(ocean.model)
    initial_state(config, ocean, config.ensemble.members - 1)
    random_forcing_of(config, ocean, 0)
    box_averages(ocean, config.output.boxes)
    stepper_of(config.time.scheme, ocean, config.time.step)
    resolved = config.resolved
    if isinstance(resolved, FourierSettings):
        kept = int(kept_coordinates(resolved, ocean.waves).sum())
    elif isinstance(resolved, EofSettings):
        kept = resolved.modes
    else:
        kept = prescribed_basis(resolved, ocean).n_modes
    if kept >= ocean.size:
        message = (
            f"[resolved] modes = {kept}, but the grid has {ocean.size} coordinates and "
            "some must be left unresolved; ask for fewer"
        )
        raise DataError(message)
    white = [name for name in config.closures.use if name.startswith("white")]
    if white and kept > LARGEST:
        message = (
            f"[closures] {white[0]}: {kept} resolved modes make a cubic of {kept}^4 "
            f"coefficients, and it is made for at most {LARGEST} modes; keep fewer, or "
            "leave it out of [closures] use"
        )
        raise DataError(message)
    check_series_memory(config, kept)
