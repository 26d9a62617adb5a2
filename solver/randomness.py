"""Random streams that depend on what they are for, and on nothing else."""

from __future__ import annotations

import hashlib

import numpy as np


def stream(seed: int, member: int, purpose: str) -> np.random.Generator:
    """Random stream of one member for one purpose.

    Parameters
    ----------
    seed : int
        Entropy of the study.
    member : int
        Member of the ensemble; the stream is the same whatever others there
        are.
    purpose : str
        What the numbers are for, such as ``"stirring"``.

    Returns
    -------
    numpy.random.Generator
        PCG64 on a child of ``SeedSequence(seed)``.
    """
    # A hash, not a counter: a purpose keeps its stream when others come or go.
    digest = hashlib.sha256(purpose.encode()).digest()
    key = (member, int.from_bytes(digest[:4], "big"))
    return np.random.Generator(
        np.random.PCG64(np.random.SeedSequence(seed, spawn_key=key))
    )
