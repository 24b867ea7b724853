"""Figures of a response: overshoot, rise, settling and the rest."""
