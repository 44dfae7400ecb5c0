"""Holding the field: the one thing that rampside may do to a magnet supply.

Only where [hold] says how and a person armed it for this run. Then, on stable or on the person's
button, one line of text goes to the supply, once; after that only the field readings are looked at.

==========  ==================================================================================
words       the cautions, and what the states are called: for terminal and page alike
code        the code of a run, which a person has to type
course      whether the field moves as planned
standing    whether the field stands
keeper      who decides: armed or not, when the command goes out, whether the field was held
record      the files that say that it is about to be sent, and what came of it
command     the exchange with the supply
__main__    the process that carries it out, once, and can do nothing else
==========  ==================================================================================

All but the last two take numbers and return decisions: no clock, file, socket or process.
"""
