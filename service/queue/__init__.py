"""The durable queue: DBOS behind a few domain verbs.

`engine` holds the names and the database that API and workers share, `orders` is the side that puts jobs in,
`runner` the side that carries them out, `slots` tells which workers live. The rows of `service.store` are what callers
see; the engine's own state only makes sure that every unfinished row is carried out.
"""
