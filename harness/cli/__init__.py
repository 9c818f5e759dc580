"""The command line: parse, call one function, print. Thin on purpose."""
