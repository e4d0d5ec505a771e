"""The command line: the only package that knows the screen."""
