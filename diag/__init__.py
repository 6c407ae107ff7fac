"""diag: the fault-isolation bench for gas-turbine oil circuits."""
