"""Colour arithmetic: spaces, whites, opponent planes, adaptation, differences.

Arrays in, arrays out; nothing here reads a file.  Working light is linear Rec.2020 with a D65 white.
"""
