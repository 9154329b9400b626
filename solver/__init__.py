"""The physics of Crossdip: sources, fibre, receiver and estimators, with no server in sight."""
