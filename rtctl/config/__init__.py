"""Files to checked, frozen objects: arm file, limits file, run file. Every problem of a file is reported at once."""
