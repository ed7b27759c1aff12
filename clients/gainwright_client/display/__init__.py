"""What the command shows on a terminal: wire documents in, renderables out. Talks to no service and reads no file."""
