// Package market streams Matrix Market coordinate files (.mtx, .mtx.gz).
package market
