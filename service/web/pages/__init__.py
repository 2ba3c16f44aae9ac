"""The pages: server-rendered, for people who would rather look than read JSON."""
