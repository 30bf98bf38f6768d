package intake

import (
	"strings"
	"unicode/utf16"

	"steelyard/monitor/config"
)

// situation is a file and what becomes of it.
type situation struct {
	name    string
	change  func(*config.Source)
	content string
	want    string
}

func form(change func(*config.Form)) func(*config.Source) {
	return func(s *config.Source) { change(&s.Form) }
}

// only measures a characteristic alone, on a line from a column.
func only(m config.Measured) func(*config.Source) {
	return func(s *config.Source) { s.Columns = config.Columns{Line: "Line", Measured: []config.Measured{m}} }
}

func utf16le(s string) string {
	var b strings.Builder
	for _, u := range append([]uint16{0xfeff}, utf16.Encode([]rune(s))...) {
		b.WriteByte(byte(u))
		b.WriteByte(byte(u >> 8))
	}
	return b.String()
}

func utf16be(s string) string {
	var b strings.Builder
	for _, u := range append([]uint16{0xfeff}, utf16.Encode([]rune(s))...) {
		b.WriteByte(byte(u >> 8))
		b.WriteByte(byte(u))
	}
	return b.String()
}

const (
	row1 = "2026-03-02T10:41:07Z,L1,P-1,33.4,8.01\n"
	got1 = `2 2026-03-02T10:41:07Z L1 "P-1" head=33.4 bore=8.01` + "\n"
)

func german(s *config.Source) {
	s.Form.Delimiter, s.Form.Decimal, s.Form.TimeFormat = ';', ',', "DD.MM.YYYY hh:mm:ss"
}

var situations = []situation{
	{"plain", nil, someHeader + row1, got1},
	{"no line end at the end", nil, someHeader + row1[:len(row1)-1], got1},
	{"carriage returns", nil, strings.ReplaceAll(someHeader+row1, "\n", "\r\n"), got1},
	{"a mark of UTF-8", nil, "\ufeff" + someHeader + row1, got1},
	{"UTF-16", form(func(f *config.Form) { f.Encoding = "utf-16" }), utf16le(someHeader + row1), got1},
	{"UTF-16, upper byte first, not declared", nil, utf16be(someHeader + row1), got1},
	{
		"UTF-16 without its mark", form(func(f *config.Form) { f.Encoding = "utf-16" }), utf16le(someHeader + row1)[2:],
		`HELD r1.csv: the file begins with no mark; expected one of UTF-16 (bytes FF FE or FE FF), as "encoding" of the source declares`,
	},
	{
		"UTF-16 cut in a character", nil, utf16le(someHeader + row1)[:101],
		`HELD r1.csv: the file has an odd number of bytes; expected UTF-16, two bytes a character: the end is missing`,
	},
	{
		"UTF-16 with half a pair", nil, utf16le(someHeader+row1) + "\x00\xd8" + utf16le("x\n")[2:],
		got1 + `3 held: r1.csv, line 3: read 1 fields; expected 5, as many as the header has | "\\xffx"`,
	},
	{
		"windows-1252 by declaration", func(s *config.Source) { s.Form.Encoding = "windows-1252"; s.Columns.Measured[0].Column = "Head €°" },
		"Tested at,Line,Serial,Head \x80\xb0,Bore mm\n2026-03-02T10:41:07Z,L1,\xc4-1,33.4,8.01\n",
		`2 2026-03-02T10:41:07Z L1 "Ä-1" head=33.4 bore=8.01`,
	},
	{
		"windows-1252 with an impossible byte", form(func(f *config.Form) { f.Encoding = "windows-1252" }), someHeader + "\x81\n",
		`HELD r1.csv: line 2 holds the byte 81, which windows-1252 does not have; expected another encoding, declared as "encoding" of the source`,
	},
	{
		"windows-1252 that is UTF-8", form(func(f *config.Form) { f.Encoding = "windows-1252" }), "\ufeff" + someHeader + row1,
		`HELD r1.csv: the file begins with the mark of UTF-8; expected windows-1252, as "encoding" of the source declares`,
	},
	{
		"windows-1252 not declared", nil, someHeader + "2026-03-02T10:41:07Z,L1,\xc4-1,33.4,8.01\n" + row1,
		`2 held: r1.csv, line 2: column 3 ("Serial"): read bytes that are not UTF-8; expected text in UTF-8, or another "encoding" of the source | "2026-03-02T10:41:07Z,L1,\\xc4-1,33.4,8.01"
3 2026-03-02T10:41:07Z L1 "P-1" head=33.4 bore=8.01`,
	},
	{"decimal comma", german, "Serial;Head kPa;Bore mm;Line;Tested at\nP-1;33,4;8,01;L1;02.03.2026 10:41:07\n", got1},
	{"one digit where two can be", german, "Serial;Head kPa;Bore mm;Line;Tested at\nP-1;33,4;8,01;L1;2.3.2026 10:41:07\n", got1},
	{"tabs", form(func(f *config.Form) { f.Delimiter = '\t' }), strings.ReplaceAll(someHeader+row1, ",", "\t"), got1},
	{"blanks around cells", nil, "Tested at , Line,Serial ,Head kPa,\tBore mm\n2026-03-02T10:41:07Z, L1 ,P-1 , 33.4,8.01\t\n", got1},
	{"columns that nobody asked for", nil, "x,Tested at,Line,y,Serial,Head kPa,Bore mm,x\n1,2026-03-02T10:41:07Z,L1,,P-1,33.4,8.01,\n", got1},
	{
		"preamble and units", form(func(f *config.Form) { f.Preamble, f.UnitsRow = 2, true }),
		"Rig \"one\n\n" + someHeader + ",,,kPa,mm\n" + row1,
		strings.Replace(got1, "2", "5", 1),
	},
	{
		"shorter than its preamble", form(func(f *config.Form) { f.Preamble = 5 }), "a\nb\n",
		`HELD r1.csv: the file ends after 3 lines; expected a header behind 5 lines that come first ("preamble")`,
	},
	{
		"quotes", nil, someHeader + "2026-03-02T10:41:07Z,\"L1\",\"P \"\"x\"\", 1\",\"33.4\",8.01\n\"2026-03-02T10:41:08Z\",L1,\"\",33.5,\"\"\n",
		`2 2026-03-02T10:41:07Z L1 "P \"x\", 1" head=33.4 bore=8.01
3 2026-03-02T10:41:08Z L1 "" head=33.5`,
	},
	{
		"line ends in quotes", nil, "Tested at,Line,Serial,Head kPa,Bore mm,\"Re\r\nmark\"\r\n2026-03-02T10:41:07Z,L1,P-1,33.4,8.01,\"a\n\nb\"\n2026-03-02T10:41:08Z,L1,P-2,33.5,,\n",
		`3 2026-03-02T10:41:07Z L1 "P-1" head=33.4 bore=8.01
6 2026-03-02T10:41:08Z L1 "P-2" head=33.5`,
	},
	{
		"a serial of two lines", nil, someHeader + "2026-03-02T10:41:07Z,L1,\"P\n1\",33.4,8.01\n" + row1,
		`2 held: r1.csv, line 2: column 3 ("Serial"): read "P\n1"; expected a serial of signs that can be printed | "2026-03-02T10:41:07Z,L1,\"P\n1\",33.4,8.01"
4 2026-03-02T10:41:07Z L1 "P-1" head=33.4 bore=8.01`,
	},
	{
		"a quote inside a field", nil, someHeader + "2026-03-02T10:41:07Z,L1,5\" pump,33.4,8.01\n" + row1,
		`2 held: r1.csv, line 2: column 3 ("Serial"): read a quote inside a field that does not begin with one; expected ',' or the end of the row (a field that holds quotes stands in quotes itself, and has them doubled) | "2026-03-02T10:41:07Z,L1,5\" pump,33.4,8.01"
3 2026-03-02T10:41:07Z L1 "P-1" head=33.4 bore=8.01`,
	},
	{
		"text behind a closing quote", nil, someHeader + "2026-03-02T10:41:07Z,L1,\"P\"1,33.4,8.01\r\n" + row1,
		`2 held: r1.csv, line 2: column 3 ("Serial"): read a closing quote and behind it "1"; expected ',' or the end of the row | "2026-03-02T10:41:07Z,L1,\"P\"1,33.4,8.01"
3 2026-03-02T10:41:07Z L1 "P-1" head=33.4 bore=8.01`,
	},
	{
		"a quote that swallows rows", nil, someHeader + row1 + "2026-03-02T10:41:07Z,L1,\"P-2,33.4,8.01\n2026-03-02T10:41:07Z,L1,\"P-3\",33.4,8.01\n",
		`HELD r1.csv, line 3: column 3 ("Serial"): read a closing quote and behind it "P"; expected ',' or the end of the row; rows behind it could be misread, so the file is held whole`,
	},
	{
		"a quote that never closes", nil, someHeader + row1 + "2026-03-02T10:41:07Z,L1,\"P-2,33.4,8.01\n" + row1,
		`HELD r1.csv, line 3: column 3 ("Serial"): read a quote that opens a field and is not closed; expected a closing quote before the end of the file; rows behind it could be misread, so the file is held whole`,
	},
	{
		"a quote that closes after a mile", nil, someHeader + row1 + "\"" + strings.Repeat("x\n", longestRecord) + "\"\n",
		`HELD r1.csv, line 3: column 1 ("Tested at"): read a quote that opens a field and is not closed within 1048576 bytes; expected a closing quote; rows behind it could be misread, so the file is held whole`,
	},
	{"empty", nil, "", "HELD r1.csv: the file is empty; expected a header and rows"},
	{"empty but for a mark", nil, "\ufeff\r\n \n", "HELD r1.csv: the file is empty but for blanks; expected a header and rows"},
	{
		"nothing but zero bytes", nil, strings.Repeat("\x00", 512),
		"HELD r1.csv, line 1: the file has zero bytes from here (512 in all), up to its end; expected text: the file may not have been written to its end",
	},
	{"header only", nil, someHeader, "HELD r1.csv: the file has a header and no rows; expected rows"},
	{
		"no value in any row", nil, someHeader + "2026-03-02T10:41:07Z,L1,P-1,,\n2026-03-02T10:41:07Z,L1,P-2,,\n",
		"HELD r1.csv: none of its 2 rows has a value in a column that is measured\n2 no value\n3 no value",
	},
	{
		"a column is missing", nil, "Tested at,Line,Serial,Head kpa,Bore mm\n" + row1,
		`HELD r1.csv, line 1: the header has no column "Head kPa" (did you mean "Head kpa"?); it reads "Tested at", "Line", "Serial", "Head kpa", "Bore mm"`,
	},
	{
		"two columns are missing", nil, "Tested at,Serial,Head kPa\n",
		`HELD r1.csv, line 1: the header has no column "Line" and no column "Bore mm"; it reads "Tested at", "Serial", "Head kPa"`,
	},
	{
		"another delimiter", nil, strings.ReplaceAll(someHeader, ",", ";"),
		`HELD r1.csv, line 1: the header has no column "Tested at" and no column "Line" and no column "Serial" and no column "Head kPa" and no column "Bore mm"; it reads "Tested at;Line;Serial;Head kPa;Bore mm", one field when divided by ',': perhaps the "delimiter" of the source is to be ';'`,
	},
	{
		"a column stands twice", nil, "Tested at,Line,Serial,Head kPa,Bore mm,Head kPa\n",
		`HELD r1.csv, line 1: the header has the column "Head kPa" twice, as column 4 and column 6; expected it once`,
	},
	{
		"a header with a quote gone wrong", nil, "Tested at,Line,Se\"rial,Head kPa,Bore mm\n" + row1,
		`HELD r1.csv, line 1: column 3: read a quote inside a field that does not begin with one; expected ',' or the end of the row (a field that holds quotes stands in quotes itself, and has them doubled) (this is the header)`,
	},
	{
		"rows of another width, and blank ones", nil, someHeader + "\n,,,,\n" + row1 + " ; \n2026-03-02T10:41:07Z,L1\n , ,\t\n" + strings.TrimSpace(row1) + ",\n",
		`4 2026-03-02T10:41:07Z L1 "P-1" head=33.4 bore=8.01
5 held: r1.csv, line 5: read 1 fields; expected 5, as many as the header has | " ; "
6 held: r1.csv, line 6: read 2 fields; expected 5, as many as the header has | "2026-03-02T10:41:07Z,L1"
8 held: r1.csv, line 8: read 6 fields; expected 5, as many as the header has | "2026-03-02T10:41:07Z,L1,P-1,33.4,8.01,"`,
	},
	{
		"values that are none", nil, someHeader + row1 +
			"2026-03-02T10:41:07Z,L1,P-2,NaN,\n2026-03-02T10:41:07Z,L1,P-2,Inf,\n2026-03-02T10:41:07Z,L1,P-2,1e400,\n2026-03-02T10:41:07Z,L1,P-2,0x1p3,\n" +
			"2026-03-02T10:41:07Z,L1,P-2,1_0,\n2026-03-02T10:41:07Z,L1,P-2,>200,\n2026-03-02T10:41:07Z,L1,P-2,33.4,x\n2026-03-02T10:41:07Z,L1,P-2,812,\n",
		got1 + `3 held: r1.csv, line 3: column 4 ("Head kPa"): read "NaN"; expected a number such as 33.4 | "2026-03-02T10:41:07Z,L1,P-2,NaN,"
4 held: r1.csv, line 4: column 4 ("Head kPa"): read "Inf"; expected a number such as 33.4 | "2026-03-02T10:41:07Z,L1,P-2,Inf,"
5 held: r1.csv, line 5: column 4 ("Head kPa"): read "1e400"; expected a number that a float64 can hold, up to 1.798e+308 | "2026-03-02T10:41:07Z,L1,P-2,1e400,"
6 held: r1.csv, line 6: column 4 ("Head kPa"): read "0x1p3"; expected a number such as 33.4 | "2026-03-02T10:41:07Z,L1,P-2,0x1p3,"
7 held: r1.csv, line 7: column 4 ("Head kPa"): read "1_0"; expected a number such as 33.4 | "2026-03-02T10:41:07Z,L1,P-2,1_0,"
8 held: r1.csv, line 8: column 4 ("Head kPa"): read ">200"; expected a number such as 33.4 | "2026-03-02T10:41:07Z,L1,P-2,>200,"
9 held: r1.csv, line 9: column 5 ("Bore mm"): read "x"; expected a number such as 33.4 | "2026-03-02T10:41:07Z,L1,P-2,33.4,x"
10 held: r1.csv, line 10: column 4 ("Head kPa"): read "812", which is 812 kPa; expected a plausible value, 0 to 100 | "2026-03-02T10:41:07Z,L1,P-2,812,"`,
	},
	{
		"an ambiguous number", nil, someHeader + row1 + "2026-03-02T10:41:07Z,L1,P-2,\"1,234\",\n",
		got1 + `3 held: r1.csv, line 3: column 4 ("Head kPa"): read "1,234", where ',' may be a decimal sign or stand between groups of digits; expected a number such as 33.4, or "decimal" or "grouping" of the source declared so | "2026-03-02T10:41:07Z,L1,P-2,\"1,234\","`,
	},
	{
		"grouping by declaration", func(s *config.Source) { s.Form.Grouping = ','; s.Columns.Measured[0].Upper = 1e9 },
		someHeader + "2026-03-02T10:41:07Z,L1,a,\"1,234.5\",\n2026-03-02T10:41:07Z,L1,b,\"1,234,567\",\n2026-03-02T10:41:07Z,L1,c,1234,\n2026-03-02T10:41:07Z,L1,d,\"12,34\",\n",
		`2 2026-03-02T10:41:07Z L1 "a" head=1234.5
3 2026-03-02T10:41:07Z L1 "b" head=1.234567e+06
4 2026-03-02T10:41:07Z L1 "c" head=1234
5 held: r1.csv, line 5: column 4 ("Head kPa"): read "12,34"; expected a number such as 33.4 | "2026-03-02T10:41:07Z,L1,d,\"12,34\","`,
	},
	{
		"stand-ins for no value", form(func(f *config.Form) { f.NoValue = []string{"9999", "n/a"} }),
		someHeader + "2026-03-02T10:41:07Z,L1,a,9999,8.01\n2026-03-02T10:41:07Z,L1,b,n/a,9999\n2026-03-02T10:41:07Z,L1,c,33.4,\n",
		`2 2026-03-02T10:41:07Z L1 "a" bore=8.01
3 no value
4 held: r1.csv, line 4: column 5 ("Bore mm"): read ""; expected a number such as 33.4 | "2026-03-02T10:41:07Z,L1,c,33.4,"`,
	},
	{
		"a line that is not known", nil, someHeader + "2026-03-02T10:41:07Z,L1,a,33.4,\n2026-03-02T10:41:07Z,l1,a,33.4,\n2026-03-02T10:41:07Z,,a,33.4,\n2026-03-02T10:41:07Z,L4,a,33.4,8.01\n",
		`2 2026-03-02T10:41:07Z L1 "a" head=33.4
3 held: r1.csv, line 3: column 2 ("Line"): read the line "l1"; expected one of "L1", "L2", "L3", "L4" (did you mean "L1"?) | "2026-03-02T10:41:07Z,l1,a,33.4,"
4 held: r1.csv, line 4: column 2 ("Line"): read the line ""; expected one of "L1", "L2", "L3", "L4" | "2026-03-02T10:41:07Z,,a,33.4,"
5 held: r1.csv, line 5: column 5 ("Bore mm"): read "8.01" for the line "L4"; expected no value, or a line on which bore is measured: "L1", "L2", "L3" | "2026-03-02T10:41:07Z,L4,a,33.4,8.01"`,
	},
	{
		"a fixed line, inches", func(s *config.Source) {
			s.Columns = config.Columns{LineIs: "L3", Measured: []config.Measured{{Characteristic: "bore", Column: "Bore in", OfIs: 1, Scale: 25.4, Offset: 1, Lower: 1, Upper: 20}}}
		},
		"Bore in\n0.5\n\n.25\n", "2 - L3 \"\" bore=13.7\n4 - L3 \"\" bore=7.35",
	},
	{
		"a fixed line that measures nothing", func(s *config.Source) { s.Columns.Line, s.Columns.LineIs = "", "L7" }, someHeader + row1,
		`HELD r1.csv: the source is about the line "L7", on which none of its characteristics is measured`,
	},
	{
		"lognormal", only(measuring("leak", "Leak")), "Line,Leak\nL1,0.5\nL1,0\n",
		`2 - L1 "" leak=0.5
3 held: r1.csv, line 3: column 2 ("Leak"): read "0": the value 0 is not above 0, as the lognormal family needs | "L1,0"`,
	},
	{
		"binomial, counted of looked at", only(config.Measured{Characteristic: "insulation", Column: "Bad", Of: "Of", Scale: 1, OfIs: 1, Lower: -1e9, Upper: 1e9}),
		"Line,Bad,Of\nL1,2,40\nL2,0,40\nL1,41,40\nL1,1,\nL1,,\n",
		`2 - L1 "" insulation=2/40
3 - L2 "" insulation=0/40
4 held: r1.csv, line 4: column 2 ("Bad"): read "41": 41 counted of 40: whole numbers are expected, with 0 <= counted <= of | "L1,41,40"
5 held: r1.csv, line 5: column 3 ("Of"): read ""; expected a number such as 33.4 | "L1,1,"
6 no value`,
	},
	{
		"binomial by words", func(s *config.Source) {
			m := measuring("insulation", "Result")
			m.Pass, m.Fail = []string{"OK", "PASS"}, []string{"NOK"}
			only(m)(s)
		}, "Line,Result\nL1,OK\nL1,NOK\nL1,PASS\nL1,ok\n",
		`2 - L1 "" insulation=0
3 - L1 "" insulation=1
4 - L1 "" insulation=0
5 held: r1.csv, line 5: column 2 ("Result"): read "ok"; expected "OK", "PASS" where the unit passed or "NOK" where it failed | "L1,ok"`,
	},
	{
		"poisson", only(config.Measured{Characteristic: "pores", Column: "Pores", Of: "Area", Scale: 1, OfIs: 1, Lower: -1e9, Upper: 1e9}),
		"Line,Pores,Area\nL1,3,2.5\nL1,3.5,1\nL1,3,0\n",
		`2 - L1 "" pores=3/2.5
3 held: r1.csv, line 3: column 2 ("Pores"): read "3.5": the count 3.5 over the exposure 1: a whole number from 0 on and an exposure above 0 are expected | "L1,3.5,1"
4 held: r1.csv, line 4: column 2 ("Pores"): read "3": the count 3 over the exposure 0: a whole number from 0 on and an exposure above 0 are expected | "L1,3,0"`,
	},
	{
		"zero bytes in a row", nil, someHeader + "2026-03-02T10:41:07Z,L1,a\x00b,33.4,\n" + row1,
		"HELD r1.csv, line 2: the file has zero bytes from here (1 in all), which are no text; expected text to the end",
	},
	{
		"zero bytes at the end", nil, someHeader + row1 + "2026-03-02T10:41:08Z,L1,P-2,33.5,8.0" + strings.Repeat("\x00", 4096),
		"HELD r1.csv, line 3: the file has zero bytes from here (4096 in all), up to its end; expected text: the file may not have been written to its end",
	},
	{
		"no row counts", nil, someHeader + "x,L1,a,33.4,\ny,L1,a,33.4,\n",
		`HELD r1.csv: no row counts; 2 are held, the first of them: line 2: column 1 ("Tested at"): read "x"; expected a time such as 2026-03-02T10:41:07 or 2026-03-02 10:41:07+01:00
2 held: r1.csv, line 2: column 1 ("Tested at"): read "x"; expected a time such as 2026-03-02T10:41:07 or 2026-03-02 10:41:07+01:00 | "x,L1,a,33.4,"
3 held: r1.csv, line 3: column 1 ("Tested at"): read "y"; expected a time such as 2026-03-02T10:41:07 or 2026-03-02 10:41:07+01:00 | "y,L1,a,33.4,"`,
	},
	{
		"clocks put forward", nil, someHeader + "2026-03-29 00:59:59,L1,a,33,\n2026-03-29 01:00:00,L1,b,33,\n2026-03-29 01:59:59.999,L1,c,33,\n2026-03-29 02:00:00,L1,d,33,\n",
		`2 2026-03-29T00:59:59Z L1 "a" head=33
3 held: r1.csv, line 3: column 1 ("Tested at"): read "2026-03-29 01:00:00", which the clocks of Europe/Lisbon passed over when they were put forward; expected a time that they showed | "2026-03-29 01:00:00,L1,b,33,"
4 held: r1.csv, line 4: column 1 ("Tested at"): read "2026-03-29 01:59:59.999", which the clocks of Europe/Lisbon passed over when they were put forward; expected a time that they showed | "2026-03-29 01:59:59.999,L1,c,33,"
5 2026-03-29T01:00:00Z L1 "d" head=33`,
	},
	{
		"clocks put back", nil, someHeader + "2026-10-25 00:59:59,L1,a,33,\n2026-10-25 01:30:00,L1,b,33,\n2026-10-25 01:59:00,L1,c,33,\n2026-10-25 01:05:00,L1,d,33,\n2026-10-25 01:59:59,L1,e,33,\n2026-10-25 02:00:00,L1,f,33,\n",
		`2 2026-10-24T23:59:59Z L1 "a" head=33
3 2026-10-25T00:30:00Z L1 "b" head=33
4 2026-10-25T00:59:00Z L1 "c" head=33
5 2026-10-25T01:05:00Z L1 "d" head=33
6 2026-10-25T01:59:59Z L1 "e" head=33
7 2026-10-25T02:00:00Z L1 "f" head=33
remark: r1.csv: 4 rows from line 3 to line 6 have a time that the clocks of Europe/Lisbon showed twice (the first: "2026-10-25 01:30:00"): 2 were taken as the earlier, 2 as the later, so that times do not go back within the file`,
	},
}
