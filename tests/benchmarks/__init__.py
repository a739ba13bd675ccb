"""Measurements that are run by hand; none is a timed test."""
