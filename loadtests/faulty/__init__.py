"""Exactly once under faults: a real service over a real store, and everything that goes wrong.

plan       the rows of an episode, cut into batches by its seed
line       the line between service and store, which can be cut, held up and broken
house      one store server or two, the line and the service, kept over several episodes
faults     what goes wrong, by name
callers    posters that send until they get a 200, and a follower of the feed
archive    every record that a log ever took, from the store's append-only files
truth      what must hold when the dust has settled
episode    one run: plan, faults, checks
"""
