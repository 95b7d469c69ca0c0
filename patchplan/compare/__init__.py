"""Room of the comparing of builds: one problem over op amps, series, tolerances, supplies, speeds and forms."""
