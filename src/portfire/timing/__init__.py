"""Produced intervals: what the subject did, and what the state predicts of it."""

from portfire.timing._behaviour import Behaviour, summarise_behaviour
from portfire.timing._decoded import Decoding
from portfire.timing._decoding import decode, find_running, round_cutoff
from portfire.timing._limits import describe_limits

__all__ = [
    "Behaviour",
    "Decoding",
    "decode",
    "describe_limits",
    "find_running",
    "round_cutoff",
    "summarise_behaviour",
]
