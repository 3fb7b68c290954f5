"""Imported in the process that workers are forked from: loads what jobs need."""

from contextlib import suppress

from waveassay.execute.work import warm_up

with suppress(Exception):  # whatever it is, a job meets it again and tells it
    warm_up()
