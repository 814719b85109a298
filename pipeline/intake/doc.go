// Package intake turns the bytes of one run file into blocks of samples in SI
// units.
//
// Call NewText, Feed it the bytes as they come, and Finish when no more will
// come; blocks go to the function given to NewText. A growing file and a
// finished one take this same road.
//
// Read are delimited text files as design.md describes a run file: header
// lines "key: value", one line of column names with units, rows of numbers.
// Encoding (UTF-8, UTF-16 with or without byte order mark, Windows-1252),
// delimiter (tab, semicolon, comma, spaces), decimal sign and comment prefix
// (#, %, //, ;, !, ' or none) are found from the content. Header keys after
// the column line are not read. "started" is RFC 3339 or a form that cannot be
// misread, with its zone (parseStarted has the list). Left out: binary exports such as HDF5 (they
// are recognised and refused by name), line breaks inside quoted fields, and
// any repair of wrong input: what cannot be read is an *Error that says where,
// what was expected and what to do.
//
// Invariants kept here, each with a test that tries to break it:
//   - How the bytes were cut into pieces changes not one bit of the rows,
//     their numbers, or the final state. Only the cut into blocks differs.
//   - A line is read when its line end is there, or at Finish when it proves
//     to be whole (see Finish); a half-written number is never taken for one.
//   - Memory is bounded by Options.MaxLine, the size of one piece and one
//     block, whatever the size of the file.
//   - Every number equals what strconv.ParseFloat makes of it, bit for bit,
//     and is scaled to SI by one multiplication or division (degrees Celsius:
//     one addition).
package intake
