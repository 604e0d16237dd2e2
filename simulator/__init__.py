"""The soft plant: processes, valves, transmitters, PID blocks, a PLC with its guard, and the wire to them.

It stands in for hardware and shares no code with the tuner.  Time is given in seconds from the
start of the plant, signals in percent of span, until a name says otherwise.
"""
