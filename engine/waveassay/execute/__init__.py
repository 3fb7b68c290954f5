"""Doing the tasks of a plan: one task's work, the store, and the runners."""
