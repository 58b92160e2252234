"""What a reader of a fit must be told beside the numbers."""

from __future__ import annotations

from dunhamfit.fit.noise import Noise

# Outside these a noise factor is said in plain words.
SMALL_FACTOR, LARGE_FACTOR = 0.5, 2.0


def noise_remarks(noise: Noise) -> tuple[str, ...]:
    """One sentence for each noise factor that is unusual or could not be told."""
    texts = []
    for name, factor, known in zip(noise.names, noise.factors, noise.determined, strict=True):
        if not known:
            texts.append(f"{name}: too few lines to tell a noise factor; the stated uncertainties are kept")
        elif factor > LARGE_FACTOR:
            texts.append(f"{name}: the lines scatter {factor:.3g} times more than their stated uncertainties say")
        elif factor < SMALL_FACTOR:
            texts.append(f"{name}: the lines scatter {1 / factor:.3g} times less than their stated uncertainties say")
    return tuple(texts)
