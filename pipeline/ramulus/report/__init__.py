"""The report layer of ramulus."""
