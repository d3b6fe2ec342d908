"""One verified package beside the paper: a BagIt bag whose payload is an RO-Crate, and the way back."""
