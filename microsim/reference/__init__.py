"""The readable engine: one SimPy process per patient, for reading and for checking the compiled engine against.

It shares the random numbers with the compiled engine and nothing else: hazards, attributes, memory, valuation and the
order of events are written a second time, from the definitions, for clarity and not for speed.
"""
