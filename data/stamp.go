package data

import (
	"bytes"
	"math"
)

// scanStamp reads an ISO 8601 stamp such as 2025-12-17T20:58:11.705923+01:00 (also with a blank for T, '/' for '-',
// a comma before the fraction, without zone, or the time of day alone). It returns whole seconds since 1970-01-01
// 00:00 UTC, or since midnight, and the fraction of a second. A stamp without zone counts as UTC.
func scanStamp(b []byte) (seconds int64, fraction float64, ok bool) {
	days := int64(0)
	if len(b) > 10 && (b[4] == '-' || b[4] == '/') && b[7] == b[4] {
		year, ok1 := digits(b[0:4])
		month, ok2 := digits(b[5:7])
		day, ok3 := digits(b[8:10])
		if !ok1 || !ok2 || !ok3 || month < 1 || month > 12 || day < 1 || day > 31 || b[10] != 'T' && b[10] != 't' && b[10] != ' ' {
			return 0, 0, false
		}
		days = civilDays(year, month, day)
		b = b[11:]
	}
	if len(b) < 5 || b[2] != ':' {
		return 0, 0, false
	}
	hour, ok1 := digits(b[0:2])
	minute, ok2 := digits(b[3:5])
	if !ok1 || !ok2 || hour > 24 || minute > 59 {
		return 0, 0, false
	}
	b = b[5:]
	second := 0
	if len(b) > 2 && b[0] == ':' {
		s, ok := digits(b[1:3])
		if !ok || s > 60 {
			return 0, 0, false
		}
		second, b = s, b[3:]
		if len(b) > 0 && (b[0] == '.' || b[0] == ',') {
			n := 1
			for n < len(b) && b[n]-'0' <= 9 {
				n++
			}
			if n == 1 {
				return 0, 0, false
			}
			f, _ := scanNumber(b[:n], b[0])
			fraction, b = f, b[n:]
		}
	}
	zone := 0
	switch {
	case len(b) == 0, len(b) == 1 && b[0]|0x20 == 'z':
	case b[0] == '+' || b[0] == '-':
		h, ok1 := digits(b[1:min(3, len(b))])
		m, rest := 0, b[min(3, len(b)):]
		if len(rest) > 0 && rest[0] == ':' {
			rest = rest[1:]
		}
		ok2 := true
		if len(rest) > 0 {
			m, ok2 = digits(rest)
			ok2 = ok2 && len(rest) == 2
		}
		if !ok1 || !ok2 || len(b) < 3 || h > 24 || m > 59 {
			return 0, 0, false
		}
		zone = 60 * (60*h + m)
		if b[0] == '-' {
			zone = -zone
		}
	default:
		return 0, 0, false
	}
	return days*86400 + int64(3600*hour+60*minute+second-zone), fraction, true
}

// hasZone tells whether a stamp that scanStamp reads says how far from UTC it is.
func hasZone(b []byte) bool {
	return b[len(b)-1]|0x20 == 'z' || bytes.LastIndexByte(b, '+') > 0 || bytes.LastIndexByte(b, '-') > bytes.IndexByte(b, ':')
}

// digits reads up to four digits.
func digits(b []byte) (int, bool) {
	x := 0
	for _, c := range b {
		if c-'0' > 9 {
			return 0, false
		}
		x = 10*x + int(c-'0')
	}
	return x, len(b) > 0 && len(b) <= 4
}

// civilDays counts the days from 1970-01-01 in the Gregorian calendar, with years that start in March so that the
// leap day is the last (E. G. Richards, "Mapping Time", Oxford University Press 1998, ch. 25 has the idea).
func civilDays(year, month, day int) int64 {
	if month <= 2 {
		year--
		month += 12
	}
	year += 400 // the winter of year 0 belongs to year -1, and division cuts towards zero
	days := 365*year + year/4 - year/100 + year/400
	return int64(days + (153*(month-3)+2)/5 + day - 1 - 719468 - 146097)
}

// A clock turns the cells of the time column into s since its first stamp, or into s as they stand where they are
// small enough to keep their resolution.
type clock struct {
	started bool
	iso     bool
	local   bool    // ISO 8601 without zone: hours may be set
	base    int64   // subtracted before the stamp becomes a float64
	scale   float64 // s per unit of the column
	last    int64   // last time of day, for midnight
	days    int64
	unit    string // of the stamps as read, for messages
}

// units of time columns, in s.
var timeUnits = map[string]float64{
	"s": 1, "sec": 1, "second": 1, "seconds": 1, "ms": 1e-3, "msec": 1e-3, "us": 1e-6, "µs": 1e-6, "μs": 1e-6, "usec": 1e-6,
	"ns": 1e-9, "min": 60, "h": 3600,
}

// start looks at the first stamp. unit is what the log says of the column, empty if nothing.
func (c *clock) start(cell []byte, mark byte, unit string) bool {
	c.scale, c.unit = 1, "s"
	if d, n, exact := scanDecimal(cell, mark); n == len(cell) && n > 0 {
		x, _ := scanNumber(cell, mark)
		if math.IsInf(x, 0) {
			return false
		}
		if s, known := timeUnits[unit]; known {
			c.scale, c.unit = s, unit
		} else {
			for _, e := range []struct {
				from, scale float64
				unit        string
			}{{1e17, 1e-9, "ns"}, {1e14, 1e-6, "us"}, {1e11, 1e-3, "ms"}} { // since 1970: s are 1e9 today
				if x >= e.from {
					c.scale, c.unit = e.scale, e.unit
					break
				}
			}
		}
		if x >= 1e8 && exact && !d.neg {
			c.base = int64(x)
		}
		c.started = true
		return true
	}
	s, _, ok := scanStamp(cell)
	if ok {
		c.iso, c.base, c.last, c.started, c.unit = true, s, s, true, "ISO 8601"
		c.local = !hasZone(cell)
		if s < 86400 {
			c.base = 0
		}
	}
	return ok
}

// read returns the stamp of a cell in s.
func (c *clock) read(cell []byte, mark byte) (float64, bool) {
	if c.iso {
		s, f, ok := scanStamp(cell)
		if !ok {
			return 0, false
		}
		if c.base == 0 { // time of day: past midnight a new day starts
			if s < c.last-43200 {
				c.days++
			}
			c.last = s
			s += 86400 * c.days
		}
		return float64(s-c.base) + f, true
	}
	if c.base == 0 {
		x, n := scanNumber(cell, mark)
		if n != len(cell) || n == 0 || math.IsInf(x, 0) {
			return 0, false
		}
		return x * c.scale, true
	}
	// A stamp since 1970 in a float64 has lost its resolution before the base could be taken off: do it in integers.
	d, n, exact := scanDecimal(cell, mark)
	if n != len(cell) || n == 0 {
		return 0, false
	}
	whole := d.exp >= -9 && d.exp <= 0 && exact && !d.neg && d.mant < 1<<63
	if whole {
		ten := int64(pow10[-d.exp])
		if c.base <= math.MaxInt64/ten {
			return float64(int64(d.mant)-c.base*ten) / float64(ten) * c.scale, true
		}
	}
	x, _ := scanNumber(cell, mark)
	if math.IsInf(x, 0) {
		return 0, false
	}
	return (x - float64(c.base)) * c.scale, true
}
