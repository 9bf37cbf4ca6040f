"""The phantom layer of ramulus."""
