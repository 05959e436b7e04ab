"""From files to the Profiles dataset: recognise, read, check, assemble."""
