// Package inflate decodes gzip members (RFC 1952) of deflate data (RFC 1951),
// about twice as fast as general-purpose packages on the noisy integers of images:
// tables that give two literals at a time, 64 bits in hand, and nothing else.
//
// # Properties
//
//  1. It accepts what compress/gzip accepts, and gives the same bytes; it refuses
//     what compress/gzip refuses. A fuzz target holds it to that.
//  2. It reads one member and leaves its input just behind it.
//  3. Any input ends in bytes or an error: no panic, and memory that does not
//     depend on the input.
package inflate
