"""Odds of every cause: the network, weighted hypotheses, evidence and explanation."""
