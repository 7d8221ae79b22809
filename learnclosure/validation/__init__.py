"""Folds, scores, selection, evaluation and the audit of constraints."""
