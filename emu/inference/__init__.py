"""From rows to posteriors: the exact likelihood, estimators and samplers."""
