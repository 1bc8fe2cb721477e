"""Names that only a thorough job leaves: each is explained, and a thorough job in the tests has it."""

from __future__ import annotations

OF_THOROUGH_RUNS = {
    *("ahead_nats", "assignment", "at_cue", "at_cue_se", "at_next_dim", "at_previous_dim", "beats"),
    *("behind_both_nats", "beside_nats", "blocks", "check", "condition_rate_bits_per_spike"),
    *("course", "difference", "drawn", "draws", "edges_s", "estimate", "failed", "grid_s"),
    *("labels", "labels_matched", "levels", "loss_nats", "matters", "parameters"),
    *("persistence_profile", "persistence_s", "persistence_words", "rate", "rate_high", "rate_low"),
    *("rival", "se", "share_on_axis", "tests", "two_pushes", "unseen_units_bits_per_spike"),
    *("unseen_units_groups",),
}
