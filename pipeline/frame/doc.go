// Package frame reads one image file dropped by a camera: its pixels and the
// time it was taken.
//
// # Pixels
//
// The format is found from the first bytes of the file, never from its name:
//
//	TIFF   classic and BigTIFF, either byte order, strips or tiles; not
//	       compressed, LZW, Deflate (8 and 32946) or PackBits; predictors 1,
//	       2 and 3; 8-, 16- and 32-bit integers, packed 10, 12 and 14 bits,
//	       32- and 64-bit floats; the first page of several [1, 2, 3, 4]
//	PNG    8- and 16-bit grey [5]
//	FITS   BITPIX 8, 16, 32, 64, -32, -64 with BSCALE, BZERO and BLANK; the
//	       primary array or the first image extension [6]
//	NPY    versions 1 to 3, integers and floats, either byte order, C and
//	       Fortran order, two axes [7]
//
// All are grey, one channel. Colour, palettes and planes are refused.
//
// Pix is row-major in file order: row 0 is the first row stored. For TIFF,
// PNG and NPY that is the top row. FITS viewers draw the first stored row at
// the bottom of the screen by convention; it is row 0 here all the same, so a
// FITS frame stands upside down against such a viewer. A TIFF whose
// Orientation tag asks for turning is not turned either.
//
// Values are the stored codes in ADU, rounded to float32: exact up to 24 bits.
// Pixels that are not finite are kept and counted in Frame.NonFinite.
//
// # Damage and size
//
// A file is checked before memory is taken for it: the sides it claims
// against Limits, and the bytes they need against what the file could hold at
// the best ratio its compression can reach. Decompression then runs row by
// row into one row buffer. Errors wrap ErrTruncated, ErrTooLarge, ErrFormat or
// ErrEmpty and say what to do.
//
// # Time
//
// A Stamper reads the time, the shot number or both from the file's name by a
// strptime pattern, from tags in the file, from a JSON file beside it, or, as
// a last resort, from the file's modification time. A pattern takes
//
//	%Y year, 4 digits      %H hour 0-23       %z zone: Z, +hh, +hhmm, +hh:mm
//	%y year, 2 digits      %M minute          %s seconds since 1970, UTC
//	%m month 1-12          %S second 0-59     %% a percent sign
//	%b month, 3 letters    %f fraction of a second, 1 to 9 digits
//	%d day 1-31            {shot} the shot number, digits
//	%j day of the year     {*} anything, or nothing
//
// and must match the whole name, upper and lower case being the same, as in
// strptime [8]. Two-digit years 69-99 are 1969-1999, 00-68 are 2000-2068. A
// number may lack its leading zero only where no other number touches it.
//
// # References
//
//  1. TIFF Revision 6.0, Adobe, 1992.
//  2. Adobe Photoshop TIFF Technical Note 3 (2005): predictor 3.
//  3. The BigTIFF file format, awaresystems.be, as implemented by libtiff 4.
//  4. Exif 2.32, CIPA DC-008-2019: DateTimeOriginal, SubSecTime, OffsetTime.
//  5. PNG, third edition, W3C 2025.
//  6. FITS standard 4.0, IAU FITS Working Group, 2018; 4.4.2 for BSCALE and
//     BLANK, 9.1 for DATE-OBS.
//  7. numpy.lib.format: NEP 1.
//  8. POSIX.1-2017, strptime; %f and %z as in Python's datetime.
package frame
