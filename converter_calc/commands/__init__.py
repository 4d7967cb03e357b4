"""The commands of the command line, a module a topic; no metallurgy here."""
