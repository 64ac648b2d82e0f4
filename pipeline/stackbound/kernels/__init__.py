"""Compiled inner loops of the tile codec, one idea a file.

Each integer kernel has a plain twin in `stackbound.decode` or in the tests.
"""
