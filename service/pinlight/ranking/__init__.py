"""Ranking: what a ranking reads, the gates, the error budget, the result."""
