"""Folds, gains, p values and verdicts: what the held-out scores say about the accounts."""

from ._folds import block_of, block_size, fold_of, training_rows

__all__ = ["block_of", "block_size", "fold_of", "training_rows"]
