"""What is assumed about the outcome: distribution, link, likelihood, scale."""

from addmodel.outcomes.outcome import NAMES, Outcome, outcome_described, outcome_for

__all__ = ["NAMES", "Outcome", "outcome_described", "outcome_for"]
