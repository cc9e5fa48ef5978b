"""tercet: the sequencer. Public names are loaded when first used, so that `tercet --help` is quick."""
