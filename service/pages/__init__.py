"""Pages for people: start, interactive documentation, problems."""
