"""Study: a TOML text in, a checked and frozen Study out; nothing in the text is ever executed."""
