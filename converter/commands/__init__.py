"""The commands, one module each; imported only when they are called."""
