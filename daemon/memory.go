package daemon

// fallbackMemory is what a computer is taken to have where it cannot be asked.
const fallbackMemory = 4 << 30
