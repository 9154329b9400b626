"""The web server, the command line and the engine that carries studies out."""
