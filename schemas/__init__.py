"""Shapes on the wire.  They check form; meaning is checked where it is used."""
