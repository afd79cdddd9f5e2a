"""The cautions that every result carries."""

from __future__ import annotations

__all__ = ["GENERAL_CAUTIONS"]

GENERAL_CAUTIONS = (
    "The swelling verdict is a screening result and no design value: index and swell tests under the local code, judged by "
    "a licensed engineer, go before it.",
    "X-rays, ethylene glycol, glycerol, furnaces and dust with respirable silica or fibres: follow the rules of the place.",
)
