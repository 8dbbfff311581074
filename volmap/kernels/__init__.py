"""Floor 0: arrays in, arrays out; numpy and numba only.

Each fast kernel has a plain slow twin in the tests.
"""
