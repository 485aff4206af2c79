//! Requests to the running daemon over a Unix socket, and the client that sends them.
