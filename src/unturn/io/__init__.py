"""Files in, files out. Readers and writers know no mechanics; node reordering happens only here."""
