"""How fast porter is, against doing the same in a plain way; run on request by `python -m tests.bench`."""
