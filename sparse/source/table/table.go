// Package table streams delimited text: comma, semicolon, tab or blanks, found
// from the first data line; # comments; one header line; CRLF.
package table
