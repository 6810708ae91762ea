"""The commands of the command line: parse, call the library once, print."""
