"""An independent world: lamp, optics, mechanics and counter with physics of their own.

Nothing here imports the analysis: a wrong formula there must not be able to hide behind
the same formula here.
"""
