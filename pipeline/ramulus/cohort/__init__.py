"""The cohort layer of ramulus."""
