"""Mutual coupling, embedded element patterns and station beams of wire-antenna arrays."""
