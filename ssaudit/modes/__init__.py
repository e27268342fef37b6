"""Poles in bulk, their quantities, participation and trust."""
