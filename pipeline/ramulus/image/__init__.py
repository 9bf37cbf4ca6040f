"""The image layer of ramulus."""
