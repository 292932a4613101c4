// Package nexus writes HDF5 files in the NeXus layout, streams cubes of any
// size into them, and reads its own files back.
//
// # What is written
//
// The format is the HDF5 File Format Specification, version 3.0, in the
// subset that every reader tried understands:
//
//   - superblock version 2, object headers version 2, each with its checksum;
//   - groups hold their links, and objects their attributes, in the object
//     header itself, whatever their number;
//   - attribute strings are variable-length UTF-8 in a global heap; numeric
//     attributes are little-endian int64 or float64;
//   - datasets are little-endian float32, float64 or int64, or one
//     fixed-length string; arrays of one dimension and strings lie contiguous,
//     arrays of two and more dimensions in chunks, shuffled and deflated,
//     indexed by a version 1 B-tree (data layout message version 3).
//
// Nothing else: no variable-length datasets (Octave cannot load them), no
// dense attribute storage, no newer chunk index.
//
// # Streaming
//
// Chunks are compressed by a stated number of workers and appended in the
// order of the array, so the bytes of a file do not depend on the number of
// workers or their timing. Memory is a few chunks (128 KiB each) per worker
// plus 16 bytes per chunk written; the array itself may come from a [Source]
// and never be in memory.
//
// # Reading
//
// [Open] reads what this package writes, for the status page and for
// verification. It trusts no number in the file: every address is checked
// against the file's size, every metadata checksum is verified, and no
// allocation exceeds what the file can really hold (deflate expands at most
// 1032 times). A file from another program may be refused with
// [ErrUnsupported].
//
// # References
//
//   - HDF5 File Format Specification Version 3.0, The HDF Group.
//   - NeXus manual, classes NXroot, NXentry, NXdata, NXprocess, NXinstrument,
//     NXdetector and NXnote, nexusformat.org.
//   - B. Jenkins, lookup3.c, May 2006, public domain (metadata checksum).
package nexus
