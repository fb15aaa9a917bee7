"""The parts of the stand-alone checker, each with nothing but Python's standard library and the parts before it.

In comes the text of a certificate; out go the reasons why it does not prove its claim, none if it does. It stands on
the same theorem as the builder (theory 2, 3, 10) and shares no code with it. ``synth.proof.joined`` makes one file of
the parts, which is what a hand-off bundle ships.
"""
