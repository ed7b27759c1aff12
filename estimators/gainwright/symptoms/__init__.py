"""Symptoms: what a record shows of its failure modes, measured by theme and judged by `gainwright.findings`."""
