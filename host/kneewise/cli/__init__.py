"""The command line: every verb is one call of the API, with words for people round it."""
