"""The soak test: a watch on simulated instruments, disturbed at random, and what is left of it.

==============  ==============================================================================
rig             the configuration: three instruments behind links, a ramp that lasts
link            a line between a reader and its instrument that can be cut and held up
full_disk       a disk that can be filled and emptied
listener        a subscriber of its own, to whom everything published must have come
laboratory      the simulated laboratory as a process that can be told to misbehave
disturbances    what is done to whom, and undone
truth           each reading beside what the instrument truly answered
folder          the run's folder at the end: numbers without gaps, replayed to the last bit
watched         the watch: its processes, their open files
run             the command
==============  ==============================================================================
"""
