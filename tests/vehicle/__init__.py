"""The client that runs on a vehicle, against registries on real sockets: honest, dead, slow and lying ones."""
