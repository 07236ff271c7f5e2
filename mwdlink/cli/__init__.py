"""The command line: one file a command; each parses, makes one call and hands the result on."""
