"""The command line: one file per command. Parse, call one library function, print."""
