"""The version of the program, where every document can find it."""

VERSION = "0.1.0"
