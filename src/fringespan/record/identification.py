"""From a ranking of phases to what a record keeps of it."""

from __future__ import annotations

from collections.abc import Sequence
from typing import TYPE_CHECKING

from fringespan.cautions import Caution
from fringespan.crystal.phase import Phase
from fringespan.measurement import Measurement
from fringespan.record.values import Identification, Match

if TYPE_CHECKING:
    from fringespan.ranking.hypotheses import Hypothesis, Ranking

__all__ = ["identifications_of"]

_NO_PIXEL_SIZE = Caution(
    "phases-need-pixel-size",
    "warning",
    "The picture has no pixel size, so its spacings were not compared with phases.",
    "State the pixel size, or calibrate on a reference material.",
)


def identifications_of(measurements: Sequence[Measurement], phases: Sequence[Phase]) -> tuple[Identification, ...]:
    """Compare the regions of one picture with phases, their common scale taken into account.

    Parameters
    ----------
    measurements : sequence of Measurement
        Of one picture.
    phases : sequence of Phase
        None: nothing is compared.

    Returns
    -------
    tuple of Identification
        One a measurement; without a verdict, and with a caution, if the picture has no pixel size.
    """
    if not phases or not measurements:
        return (Identification(),) * len(measurements)
    if measurements[0].micrograph.pixel_size_nm is None:
        return (Identification(cautions=(_NO_PIXEL_SIZE,)),) * len(measurements)
    from fringespan.ranking.rank import rank_regions

    return tuple(_identification(ranking) for ranking in rank_regions(measurements, phases, shared="scale"))


def _identification(ranking: Ranking) -> Identification:
    return Identification(
        verdict=ranking.verdict,
        matches=tuple(_match(hypothesis) for hypothesis in ranking.matches),
        sentence=ranking.sentence,
        cautions=ranking.cautions,
    )


def _match(hypothesis: Hypothesis) -> Match:
    return Match(
        phase=hypothesis.phase,
        zone=hypothesis.zone,
        probability=hypothesis.probability,
        hkl=hypothesis.hkl,
        rotation_deg=hypothesis.rotation_deg,
        scale=hypothesis.scale,
        scale_uncertainty=hypothesis.scale_uncertainty,
        fits=hypothesis.fits,
        pulls=hypothesis.pulls,
        indistinguishable_from=hypothesis.indistinguishable_from,
    )
