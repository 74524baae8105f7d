"""Phases of one oscillator from its samples: estimators behind one signature."""
