"""Compiled inner loops of the tile codec, one idea a file; each integer kernel has a plain twin in the tests or in
`stackbound.decode`."""
