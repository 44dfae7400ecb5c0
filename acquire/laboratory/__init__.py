"""A simulated laboratory: instruments on TCP sockets before a Hall bar in a ramping magnet.

Its physics is written apart from ``analyse``, so that a formula wrong in one of the two shows.
"""
