"""The figures of the page, A to G; each module draws what belongs together."""
