"""Numbers in, frozen results out: optics, counting, the fit, the verdict, the allocation.

No I/O, no clock, no asyncio, no logging. Misuse raises ValueError.
"""
