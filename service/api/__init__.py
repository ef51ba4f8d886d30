"""The HTTP interface, one module for each resource: parse, call, return."""
