"""What is signed and how it is checked: canonical bytes, signed notes, Merkle tree, report, bundle, `verify`."""
