"""A simulated bench for the tests of those who write drivers, codecs and sequences.

Installed, it is a pytest plugin with one fixture, ``virtual_bench``; docs/testing.md shows it.
Nothing is loaded before a test asks for the fixture.
"""
