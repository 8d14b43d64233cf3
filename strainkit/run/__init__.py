"""The run folder: its manifest, atomic files, what came back in strainkit's own format."""
