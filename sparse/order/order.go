// Package order puts the cells of an input into their total order and writes the
// filtered complex (package chain): cell tables, boundary blocks, complex.json.
//
// Order within a degree (only that matters; a face never has a later value than
// its coface). Lower stars and grids: by the rank of the centre that gives the
// value, where centres are ordered by (value, index). Flag complexes: edges by
// (value, smaller, larger endpoint), a simplex by (rank of its longest edge, other
// vertices descending). Simplex lists: (value, vertices ascending). Matrices:
// column order.
package order
