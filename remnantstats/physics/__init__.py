"""Pure functions of arrays: settling, accretion, dust, the mass relation, orbits, neighbours.

Import the module that is needed; nothing is imported here, so that the command line starts fast.
"""
