package calib

// minWindow is the smallest side of a window, px: under it neither the blur
// nor the registration can be found.
const minWindow = 8
