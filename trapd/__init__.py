"""trapd: the background service that owns an ion trap's RF synthesizers and DC supplies."""
