"""The stages of the job: each reads a folder, calls the rooms below, and writes the folder."""
