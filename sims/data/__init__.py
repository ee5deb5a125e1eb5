"""Tables that come with the package, each with its provenance in its heading."""
