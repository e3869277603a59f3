"""One file a verb: spec in, record out. Nothing here prints; a notebook calls the same functions.

from synth.jobs.propose import propose
done = propose("mast.toml")
done.record["candidates"][0]["parameters"]
"""
