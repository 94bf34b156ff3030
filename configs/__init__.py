"""The ground: what is known (substances, buffers, methods, benches), its typed loader, the error root."""
