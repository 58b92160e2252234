"""Where a chain stands, as plain arrays: all that it takes to go on exactly as if it had never stopped."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np


@dataclass(frozen=True, eq=False)
class ChainState:
    """Where every ensemble stands, and its random generator (Mersenne twister) as plain numbers.

    Attributes
    ----------
    coords : ndarray of float, shape (ensembles, walkers, d)
    log_prob : ndarray of float, shape (ensembles, walkers)
    random_keys : ndarray of uint32, shape (ensembles, 624)
    random_position : ndarray of int, shape (ensembles,)
    random_spare : ndarray of float, shape (ensembles, 2)
        Whether a normal deviate is held back (0 or 1), and which.
    """

    coords: np.ndarray
    log_prob: np.ndarray
    random_keys: np.ndarray
    random_position: np.ndarray
    random_spare: np.ndarray

    @classmethod
    def of(cls, coords: np.ndarray, log_prob: np.ndarray, random: list[tuple]) -> ChainState:
        """From coordinates and the states of numpy's generators, one an ensemble."""
        return cls(
            coords=coords,
            log_prob=log_prob,
            random_keys=np.stack([item[1] for item in random]).astype(np.uint32),
            random_position=np.array([item[2] for item in random], dtype=np.int64),
            random_spare=np.array([[item[3], item[4]] for item in random], dtype=float),
        )

    def generator(self, ensemble: int) -> np.random.RandomState:
        """The generator of one ensemble, where it stopped."""
        held, deviate = self.random_spare[ensemble]
        random = np.random.RandomState()
        random.set_state(
            ("MT19937", self.random_keys[ensemble], int(self.random_position[ensemble]), int(held), float(deviate))
        )
        return random


@dataclass(frozen=True, eq=False)
class Block:
    """A piece of chain.

    Attributes
    ----------
    draws : ndarray of float, shape (steps, ensembles, walkers, d)
        In the coordinates of the sampler.
    state : ChainState
        After the last step.
    accepted : ndarray of int, shape (ensembles,)
        Proposals accepted.
    """

    draws: np.ndarray
    state: ChainState
    accepted: np.ndarray


def seeded(seed: int, ensembles: int) -> list[np.random.RandomState]:
    """Independent generators, one for each ensemble (the kind that emcee works with)."""
    children = np.random.SeedSequence(seed).spawn(ensembles)
    return [np.random.RandomState(np.random.MT19937(child)) for child in children]
