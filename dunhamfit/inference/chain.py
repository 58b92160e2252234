"""Markov chains of independently seeded ensembles, run by emcee in blocks and resumed bit for bit.

emcee steps all walkers of one ensemble together, evaluated in one batch. Every ensemble
has a random generator of its own, all derived from one seed, and neither the length of a
block nor a pause between two blocks changes a single bit of the chain.
"""

from __future__ import annotations

from typing import Protocol

import emcee
import numpy as np

from dunhamfit.inference.chain_state import Block, ChainState, seeded


class Target(Protocol):
    """What is sampled.

    Attributes
    ----------
    size : int
        Number of coordinates, d.
    walkers : int
        In each ensemble, w.
    warm_up : int
        Steps that bring the walkers from where they start into the posterior; they are not kept.
    """

    size: int
    walkers: int
    warm_up: int

    def log_prob(self, coords: np.ndarray) -> np.ndarray:
        """Log posterior that emcee records, shape (w,), of coordinates of shape (w, d)."""

    def moves(self) -> list[emcee.moves.Move]:
        """The moves that take turns, at random."""

    def start(self, random: np.random.RandomState) -> np.ndarray:
        """Coordinates of the walkers of one ensemble at the start, shape (w, d)."""

    def natural(self, coords: np.ndarray) -> np.ndarray:
        """Coordinates, shape (..., d), in the units of the quantities that they stand for."""


def start_chain(target: Target, *, seed: int, ensembles: int) -> ChainState:
    """Walkers after the warm-up.

    Parameters
    ----------
    target : Target
    seed : int
    ensembles : int
    """
    states = []
    for random in seeded(seed, ensembles):
        coords = target.start(random)
        states.append(emcee.State(coords, log_prob=target.log_prob(coords), random_state=random.get_state()))
    return run_chain(target, _gathered(states), steps=target.warm_up).state


def run_chain(target: Target, state: ChainState, *, steps: int) -> Block:
    """Take every ensemble `steps` further.

    Parameters
    ----------
    target : Target
    state : ChainState
    steps : int
    """
    ensembles = len(state.coords)
    draws = np.empty((steps, *state.coords.shape))
    accepted = np.zeros(ensembles, dtype=np.int64)
    if not steps:
        return Block(draws, state, accepted)
    ends = []
    for ensemble in range(ensembles):
        sampler = emcee.EnsembleSampler(
            target.walkers, target.size, target.log_prob, moves=target.moves(), vectorize=True
        )
        # Walkers move on their own, not by the spread of the others, so that emcee's check of that spread
        # at the start has no object.
        ends.append(sampler.run_mcmc(_resumed(state, ensemble), steps, skip_initial_state_check=True))
        draws[:, ensemble] = sampler.get_chain()
        accepted[ensemble] = int(sampler.backend.accepted.sum())
    return Block(draws, _gathered(ends), accepted)


def _resumed(state: ChainState, ensemble: int) -> emcee.State:
    """The state of one ensemble as emcee wants it."""
    return emcee.State(
        state.coords[ensemble],
        log_prob=state.log_prob[ensemble],
        random_state=state.generator(ensemble).get_state(),
        copy=True,
    )


def _gathered(states: list[emcee.State]) -> ChainState:
    """One record of the states of all ensembles."""
    random = [state.random_state for state in states]
    return ChainState.of(
        np.stack([state.coords for state in states]), np.stack([state.log_prob for state in states]), random
    )
