"""A simulated laboratory: instruments on TCP sockets before a Hall bar in a ramping magnet.

    python -m acquire.laboratory CONFIG [--truth FILE] [--parent PID]

Its physics is written apart from ``analyse``, so that a formula wrong in one of the two shows.

==============  ==============================================================================
scenario        what it contains: the ``[laboratory]`` part of a configuration
hall_bar        resistances of the sample against field
field_course    the field against time: a ramp that can be held
cascade         equal RC stages behind signal and white noise, exact for any step of time
lockin, magnet  the instruments' insides: numbers in, numbers out
bench           all of them together, each with the commands that it understands
commands        lines of text to replies, in the manner of IEEE 488.2
faults          misbehaviour on request
truth           what the instruments truly answered, on record
wire            one connection: bytes to lines, and replies that can be late
server          the sockets
==============  ==============================================================================

Everything below the server takes the time as a number, so that tests run as fast as they can.
"""

import acquire.config  # noqa: F401 - it holds the scenario's schema, so it has to come first
