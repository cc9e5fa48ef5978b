"""Simulated benches: one truth behind all devices of a rig, answering the same bytes as real ones."""
