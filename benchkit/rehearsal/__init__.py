"""The rehearsal bench: a simulated unit, and instruments that answer real SCPI over real sockets."""
