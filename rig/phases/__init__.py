"""Phase estimators behind one signature; see ``estimate``."""
