"""Figures of the report, one function a picture; Figure objects only."""
