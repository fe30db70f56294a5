"""The page a reviewer reads: one self-contained HTML file made from a run's folder."""
