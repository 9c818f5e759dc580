"""Link drivers: one file for each way that bytes can travel to the device and back."""
