"""From readings to what they say: model, likelihood, fit, verdicts, outcome."""
