"""Figures, the report page and the model card."""
