"""Manifest of hashes and calibration records: what lets a reviewer check the report."""
