"""What the service does, one file a deed: the only place where core and store meet."""
