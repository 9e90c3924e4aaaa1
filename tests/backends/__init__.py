"""Runs emitted firmware on real instruction sets: in CPU emulators, and compiled for this machine."""
