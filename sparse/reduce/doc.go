// Package reduce settles the columns of one block over Z/2 against the pivots of
// the rows that a worker owns.
//
// Problem. Given block k in one of its routes (columns = k-cells, or, for the
// coboundary route, (k−1)-cells in reverse order), find for every column the row
// that becomes its pivot after adding columns of smaller index, or that it becomes
// zero. Pairs (pivot, column) are unique whatever order the work is done in.
//
// Methods. Column reduction: Edelsbrunner, Letscher, Zomorodian 2002. Clearing:
// Chen, Kerber 2011. Distribution and row compression: Bauer, Kerber,
// Reininghaus 2014. A newcomer with a smaller index takes a pivot and the old
// holder goes on: Morozov, Nigmetov 2020. So columns may be offered in any order,
// by any number of goroutines. Carried checksums: Huang, Abraham 1984.
//
// Conventions. Rows and columns are ranks of the route. Rows are cut into tiles
// of equal height (Tiling); tile t lives on worker t mod W. A column whose pivot
// is another worker's leaves (Hand.TakeLeft). Apparent columns are known to all
// workers and added wherever the working column is.
//
// Invariants, checked at every step: every copy of a column is its initial one
// plus columns of smaller index; i < j at every addition; pivots are distinct; a
// column's pivot only falls. A violation is a *Failure: the job must not publish.
//
// Cost. Worst case cubic; in practice the number of additions times the length of
// what is added. Memory: 8 bytes a row owned, rows/8 bytes a Hand, and the changed
// columns (4 bytes an entry or 12 a word of 64 rows, and 16 each).
//
// A Hand belongs to one goroutine; a Table is shared by the Hands of one worker.
// The package starts no goroutine but inside Solve, which waits for them.
package reduce
