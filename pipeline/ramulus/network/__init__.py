"""The network layer of ramulus."""
