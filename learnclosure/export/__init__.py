"""Predictor graphs, bundles and what a receiver checks before loading one."""
