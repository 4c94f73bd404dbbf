"""Bytes to signed bytes: canonical text, envelopes, keys.  Knows no statistics."""
