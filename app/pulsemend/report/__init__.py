"""Readiness, HTML reports and methods texts of epoch sets."""
