"""The commands, one module for each kind of work; each is words in, one workflow call, lines out."""
