"""Commands of the command line, one subject a file: parse, call, print."""
