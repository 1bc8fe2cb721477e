"""Folds, gains, p values and verdicts: what the held-out scores say about the accounts."""

from ._bootstrap import Bootstrap, DrawnP, bootstrap_score, bound_covariances, sequential_p
from ._boundary import (
    cone_weights,
    count_parameters,
    expected_cost,
    likelihood_ratio_p,
    mixture_weights,
)
from ._carry import carrying_time_constant
from ._checks import Check, check_predictions, cut_windows, say_failed, summarise_activity
from ._cone import score_statistic
from ._contrast import Contrast, Entry, Scored, contrast_sources
from ._course import Course, cut_time, find_course
from ._folds import block_of, block_size, count_fewest, fold_of, inner_sets, training_rows
from ._gain import Gain, ResampledT, corrected_resampled_t, gain, holm, paired_difference
from ._ladder import Ladder, climb, contrast_accounts
from ._persistence import (
    PERSISTENCE_GRID_S,
    Persistence,
    Profile,
    find_persistence,
    mean_delay,
    profile_persistence,
    summarise_profile,
)
from ._rivals import Rival, RivalScore, list_rivals, name_winner, score_rival
from ._robust import (
    ASSIGNMENTS,
    deal_labels,
    push_scores,
    randomisation_p,
    randomise_source,
    robust_p,
    sign_flip_p,
    sum_blocks,
)
from ._size import Choice, Deficit, choose_smallest
from ._unseen import UnseenCondition, compare_unseen, leave_out, separable_conditions
from ._verdict import (
    Evidence,
    Verdict,
    describe_mimic,
    judge,
    overrule,
    rate_route,
    reconcile,
    trials_to_close,
)
from ._yardsticks import condition_rate_by_unit, deal_units, keep_units, null_by_unit, unseen_units

__all__ = [
    "UnseenCondition",
    "compare_unseen",
    "condition_rate_by_unit",
    "deal_units",
    "keep_units",
    "leave_out",
    "null_by_unit",
    "separable_conditions",
    "unseen_units",
    "Check",
    "check_predictions",
    "cut_windows",
    "say_failed",
    "summarise_activity",
    "Rival",
    "RivalScore",
    "list_rivals",
    "name_winner",
    "score_rival",
    "Course",
    "cut_time",
    "find_course",
    "ASSIGNMENTS",
    "Bootstrap",
    "DrawnP",
    "bootstrap_score",
    "bound_covariances",
    "deal_labels",
    "push_scores",
    "randomisation_p",
    "randomise_source",
    "robust_p",
    "score_statistic",
    "sequential_p",
    "sign_flip_p",
    "sum_blocks",
    "Choice",
    "Contrast",
    "Deficit",
    "Entry",
    "Ladder",
    "Scored",
    "carrying_time_constant",
    "choose_smallest",
    "climb",
    "PERSISTENCE_GRID_S",
    "Persistence",
    "Profile",
    "find_persistence",
    "mean_delay",
    "profile_persistence",
    "summarise_profile",
    "contrast_accounts",
    "contrast_sources",
    "block_of",
    "block_size",
    "count_fewest",
    "fold_of",
    "inner_sets",
    "training_rows",
    "Gain",
    "gain",
    "paired_difference",
    "ResampledT",
    "corrected_resampled_t",
    "holm",
    "cone_weights",
    "mixture_weights",
    "likelihood_ratio_p",
    "count_parameters",
    "expected_cost",
    "Evidence",
    "Verdict",
    "judge",
    "rate_route",
    "trials_to_close",
    "reconcile",
    "overrule",
    "describe_mimic",
]
