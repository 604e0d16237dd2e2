"""What a loop is: samples, modes, spans, limits, settings and the record of a test.  Pure; time is data.

Inside this room and every room above it that is pure: monotonic seconds; percent of span for
PV, SP and OP; gain in %OP/%PV.  Unknown is ``None`` or a ``Quality``, never NaN.
"""
