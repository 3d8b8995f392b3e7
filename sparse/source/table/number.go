package table

import (
	"strconv"
	"unsafe"
)

// exact are the powers of ten that a float64 holds exactly.
var exact = [...]float64{1e0, 1e1, 1e2, 1e3, 1e4, 1e5, 1e6, 1e7, 1e8, 1e9, 1e10, 1e11, 1e12, 1e13, 1e14, 1e15, 1e16, 1e17, 1e18, 1e19, 1e20, 1e21, 1e22}

// ParseFloat reads a decimal number; the result is that of strconv.ParseFloat. Short
// decimals take a fast path that is exact: digits below 2⁵³ times or over a power of
// ten that is exact too give one rounding (Clinger 1990). No allocation. Hexadecimal
// numbers and underscores are refused; NaN and infinities are numbers here.
func ParseFloat(b []byte) (float64, bool) {
	i, negative := 0, false
	if len(b) > 0 && (b[0] == '-' || b[0] == '+') {
		negative, i = b[0] == '-', 1
	}
	mantissa, digits, fraction := uint64(0), 0, 0
	for ; i < len(b) && b[i]-'0' <= 9; i++ {
		mantissa = mantissa*10 + uint64(b[i]-'0')
		digits++
	}
	if i < len(b) && b[i] == '.' {
		for i++; i < len(b) && b[i]-'0' <= 9; i++ {
			mantissa = mantissa*10 + uint64(b[i]-'0')
			digits++
			fraction++
		}
	}
	if i < len(b) || digits == 0 || digits > 18 || mantissa >= 1<<53 || fraction >= len(exact) {
		return slowFloat(b)
	}
	v := float64(mantissa) / exact[fraction]
	if negative {
		v = -v
	}
	return v, true
}

func slowFloat(b []byte) (float64, bool) {
	if len(b) == 0 {
		return 0, false
	}
	for _, c := range b {
		if c == '_' || c == 'x' || c == 'X' || c == 'p' || c == 'P' {
			return 0, false
		}
	}
	v, err := strconv.ParseFloat(unsafe.String(&b[0], len(b)), 64)
	if err != nil && v == 0 {
		return 0, false
	}
	return v, err == nil
}

// ParseUint32 reads a whole number from 0 to 2³²−2.
func ParseUint32(b []byte) (uint32, bool) {
	if len(b) == 0 || len(b) > 10 {
		return 0, false
	}
	v := uint64(0)
	for _, c := range b {
		if c-'0' > 9 {
			return 0, false
		}
		v = v*10 + uint64(c-'0')
	}
	return uint32(v), v < 1<<32-1
}
