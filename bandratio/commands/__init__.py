"""One module for each word of the command line; each holds one click command named ``command``."""
