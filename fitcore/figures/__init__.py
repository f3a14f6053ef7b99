"""Figures: each module draws one kind from a result and returns it with its data.

matplotlib is imported when something is drawn, never before.
"""
