// Package config loads the TOML file that describes a campaign, fills in
// defaults and refuses everything it does not understand.
//
// A mistake is reported as
//
//	file:line:column: what is wrong: what to write instead
//
// and all mistakes of one stage are reported together. The stages are:
//
//  1. syntax: is it TOML at all (one mistake, because nothing after it can
//     be read for certain);
//  2. shape: unknown keys, misplaced tables, values of the wrong type or
//     without a unit;
//  3. sense: values that are well written but cannot work.
//
// Line and column count from 1, columns in characters. Stages 2 and 3 point
// at the key, stage 1 at the character that could not be read.
//
// Relative paths are resolved against the folder of the configuration file.
// Loading reads that one file only: whether folders exist, disks have room
// and clocks agree is for the check command to find out.
package config
