"""Pulse pairs, pulse intervals and trains."""
