"""The commands, one module per group: each adds its own to the parser and imports what it needs when it runs."""
