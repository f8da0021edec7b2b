"""Whether a stream looks like what a plan supposes: each module answers with findings, or says what is lacking."""
