"""Independent random streams, one per named process.

Every process draws from its own stream, found by name and not by order of use. Turning one option
on therefore leaves the randomness of all others as it was, and two runs that differ in one option
can be compared sighting by sighting.
"""

from __future__ import annotations

import hashlib
from dataclasses import dataclass

import numpy as np


@dataclass(frozen=True)
class Streams:
    """Random generators of one run.

    Parameters
    ----------
    seed : int
        Seed of the run, not negative.
    """

    seed: int

    def get(self, *names: object) -> np.random.Generator:
        """A fresh generator of the process with this name; equal names give equal draws.

        Parameters
        ----------
        *names : object
            Parts of the name, e.g. ``"sighting", "heron", "front"``.

        Returns
        -------
        numpy.random.Generator
            Seeded by a SeedSequence whose spawn key is the SHA-256 digest of the name.
        """
        digest = hashlib.sha256("/".join(map(str, names)).encode()).digest()
        key = tuple(np.frombuffer(digest[:16], dtype="<u4").tolist())
        return np.random.default_rng(np.random.SeedSequence(entropy=self.seed, spawn_key=key))
