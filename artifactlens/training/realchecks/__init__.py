"""Checks of a model on real recordings whose labels took no part in its making."""
