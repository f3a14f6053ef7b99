"""Posterior chains: sampling, storage, diagnostics, summaries, evidence and export."""
