"""Produced intervals: what the subject did, and what the state predicts of it."""

from portfire.timing._behaviour import Behaviour, summarise_behaviour
from portfire.timing._decoded import Decoding
from portfire.timing._decoding import decode, find_running, round_cutoff

__all__ = ["Decoding", "decode", "find_running", "round_cutoff", "Behaviour", "summarise_behaviour"]
