"""The version of the program, written into every file it makes."""

VERSION = "0.1.0"
