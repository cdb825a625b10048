"""Modewright: eigenbases of -(p u')' + q u = lambda w u, served over gRPC."""
