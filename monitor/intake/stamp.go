package intake

// two reads two digits; it is negative where there are none.
func two(b []byte) int {
	tens, ones := b[0]-'0', b[1]-'0'
	if tens > 9 || ones > 9 {
		return -1
	}
	return int(tens)*10 + int(ones)
}

// iso reads a time as RFC 3339 and ISO 8601 write it: a date and a time of day with T or a
// blank between them; seconds, a fraction behind a point or comma, and an offset (Z, +hh:mm or
// +hhmm) may follow. Of a fraction, nine digits count.
func (r *reading) iso(b []byte) bool {
	if len(b) < 16 || b[4] != '-' || b[7] != '-' || b[13] != ':' {
		return false
	}
	if b[10] != 'T' && b[10] != ' ' && b[10] != 't' {
		return false
	}
	century, year := two(b), two(b[2:])
	month, day, hour, minute := two(b[5:]), two(b[8:]), two(b[11:]), two(b[14:])
	if century|year|month|day|hour|minute < 0 {
		return false
	}
	r.parts = [parts]int{century*100 + year, month, day, hour, minute}
	if b = b[16:]; len(b) == 0 {
		return true
	}
	if b[0] == ':' {
		if len(b) < 3 {
			return false
		}
		if r.parts[partSecond] = two(b[1:]); r.parts[partSecond] < 0 {
			return false
		}
		b = b[3:]
		if len(b) > 0 && (b[0] == '.' || b[0] == ',') {
			n := 0
			if r.parts[partFraction], n = fraction(b[1:], len(b)); n == 0 {
				return false
			}
			b = b[1+n:]
		}
	}
	return len(b) == 0 || r.zone(b)
}

// fraction reads digits as a fraction of a second, in ns; n is how many digits there were.
func fraction(b []byte, most int) (ns, n int) {
	unit := 100_000_000
	for n < len(b) && n < most && b[n]-'0' <= 9 {
		ns += int(b[n]-'0') * unit
		unit /= 10
		n++
	}
	return ns, n
}

// zone reads Z, +hh:mm or +hhmm.
func (r *reading) zone(b []byte) bool {
	r.fixed = true
	if len(b) == 1 {
		return b[0] == 'Z' || b[0] == 'z'
	}
	if b[0] != '+' && b[0] != '-' {
		return false
	}
	sign, b := b[0], b[1:]
	if len(b) == 5 && b[2] == ':' {
		b = []byte{b[0], b[1], b[3], b[4]}
	}
	if len(b) != 4 {
		return false
	}
	hours, minutes := two(b), two(b[2:])
	if hours < 0 || hours > 23 || minutes < 0 || minutes > 59 {
		return false
	}
	if r.offset = hours*3600 + minutes*60; sign == '-' {
		r.offset = -r.offset
	}
	return true
}

// follow reads a time by a pattern.
func (r *reading) follow(steps []step, b []byte) bool {
	r.parts[partYear], r.parts[partMonth], r.parts[partDay] = 1970, 1, 1
	for i := range steps {
		s := &steps[i]
		switch s.part {
		case -1:
			if len(b) == 0 || b[0] != s.literal {
				return false
			}
			b = b[1:]
		case partFraction:
			ns, n := fraction(b, s.digits)
			if n == 0 {
				return false
			}
			r.parts[partFraction], b = ns, b[n:]
		default:
			n, x := 0, 0
			for n < len(b) && n < s.digits && b[n]-'0' <= 9 {
				x = x*10 + int(b[n]-'0')
				n++
			}
			if n < s.atLeast {
				return false
			}
			r.parts[s.part], b = x, b[n:]
		}
	}
	return len(b) == 0
}
