"""Relays: readers that run elsewhere, on record here.

A reader on another computer is started there by itself (``rampside read``) and has a run of its
own. A relay listens to it over the bus and publishes each of its rows in the run here, with this
run's numbers and times, so that the folder of this run is whole and whoever works on it need not
know where a reading came from.
"""
