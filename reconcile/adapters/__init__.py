"""One file a technique: from stated readings to evidence, and nothing about the distribution."""
