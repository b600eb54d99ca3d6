"""Fits judged: residuals, error sizes, verdicts in words, comparison of models, hidden fixes."""
