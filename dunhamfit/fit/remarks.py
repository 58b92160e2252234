"""What a reader of a fit must be told beside the numbers."""

from __future__ import annotations

from dunhamfit.fit.noise import Noise

# Outside these a noise factor is said in plain words.
SMALL_FACTOR, LARGE_FACTOR = 0.5, 2.0
# More sentences than this of one kind are drawn together.
_EACH_AT_MOST = 6


def noise_remarks(noise: Noise) -> tuple[str, ...]:
    """One sentence for each noise factor that is unusual or could not be told; one for all where there are many."""
    odd = noise.factors[noise.determined & ((noise.factors > LARGE_FACTOR) | (noise.factors < SMALL_FACTOR))]
    unknown = int((~noise.determined).sum())
    texts = []
    if len(odd) + unknown > _EACH_AT_MOST:
        if len(odd):
            texts.append(
                f"{len(odd)} of {len(noise.factors)} noise factors lie outside {SMALL_FACTOR:g} to {LARGE_FACTOR:g}, "
                f"from {odd.min():.3g} to {odd.max():.3g}: there the lines do not scatter as their stated "
                "uncertainties say"
            )
        if unknown:
            texts.append(
                f"{unknown} of {len(noise.factors)} groups have too few lines to tell a noise factor; their stated "
                "uncertainties are kept"
            )
        return tuple(texts)
    for name, factor, known in zip(noise.names, noise.factors, noise.determined, strict=True):
        if not known:
            texts.append(f"{name}: too few lines to tell a noise factor; the stated uncertainties are kept")
        elif factor > LARGE_FACTOR:
            texts.append(f"{name}: the lines scatter {factor:.3g} times more than their stated uncertainties say")
        elif factor < SMALL_FACTOR:
            texts.append(f"{name}: the lines scatter {1 / factor:.3g} times less than their stated uncertainties say")
    return tuple(texts)
