package claim

import (
	"fmt"
	"strings"
	"unicode"
	"unicode/utf8"
)

// Error is what is wrong with the text of a claim, as one sentence.
type Error struct {
	Column   int    // in characters, counted from 1
	Read     string // what stands there
	Expected string // what would be accepted
	Nearest  string // the known word nearest to Read, where there is one
}

func (e *Error) Error() string {
	text := fmt.Sprintf("column %d: read %s, expected %s", e.Column, e.Read, e.Expected)
	if e.Nearest != "" {
		text += fmt.Sprintf(" (did you mean %q?)", e.Nearest)
	}
	return text
}

type tokenKind int

const (
	tokenEnd tokenKind = iota
	tokenWord
	tokenName // a quoted name
	tokenNumber
	tokenSign // one of + - * / ( ) , < > | and ..
)

type token struct {
	kind   tokenKind
	text   string
	column int
}

// read is how an error shows the token.
func (t token) read() string {
	if t.kind == tokenEnd {
		return "the end of the claim"
	}
	return fmt.Sprintf("%q", t.text)
}

// longest is the most bytes a claim may have.
const longest = 4096

// lex cuts the text into tokens, the last of which is tokenEnd.
func lex(text string) ([]token, *Error) {
	if !utf8.ValidString(text) {
		return nil, &Error{Column: 1, Read: "bytes that are not UTF-8", Expected: "a claim in UTF-8"}
	}
	if len(text) > longest {
		return nil, &Error{Column: 1, Read: fmt.Sprintf("a claim of %d bytes", len(text)), Expected: fmt.Sprintf("at most %d", longest)}
	}
	l := lexer{runes: []rune(text)}
	for {
		t, err := l.next()
		if err != nil {
			return nil, err
		}
		l.tokens = append(l.tokens, t)
		if t.kind == tokenEnd {
			return l.tokens, nil
		}
	}
}

type lexer struct {
	runes  []rune
	at     int
	tokens []token
}

func (l *lexer) peek(ahead int) rune {
	if l.at+ahead >= len(l.runes) {
		return 0
	}
	return l.runes[l.at+ahead]
}

func (l *lexer) next() (token, *Error) {
	for l.at < len(l.runes) && unicode.IsSpace(l.runes[l.at]) {
		l.at++
	}
	t := token{column: l.at + 1}
	if l.at >= len(l.runes) {
		return t, nil
	}
	r := l.runes[l.at]
	switch {
	case r == '"':
		return l.quoted()
	case isDigit(r) || r == '.' && isDigit(l.peek(1)):
		t.kind, t.text = tokenNumber, l.number()
	case r == '.' && l.peek(1) == '.':
		t.kind, t.text = tokenSign, ".."
		l.at += 2
	case isWordStart(r):
		t.kind, t.text = tokenWord, l.word()
	case strings.ContainsRune("+-*/(),<>|", r):
		t.kind, t.text = tokenSign, string(r)
		l.at++
	default:
		return t, &Error{Column: t.column, Read: fmt.Sprintf("%q", r), Expected: "a quantity such as mean(head.L1), a number, or one of + - * / ( ) , < > |"}
	}
	return t, nil
}

func isDigit(r rune) bool     { return '0' <= r && r <= '9' }
func isWordStart(r rune) bool { return unicode.IsLetter(r) || r == '_' }

// isWordPart says what a plain name may go on with.
func isWordPart(r rune) bool { return isWordStart(r) || unicode.IsDigit(r) }

// word reads a plain name: words joined by single points, as in head.L4.
func (l *lexer) word() string {
	from := l.at
	for l.at < len(l.runes) {
		switch {
		case isWordPart(l.runes[l.at]):
			l.at++
		case l.runes[l.at] == '.' && isWordPart(l.peek(1)):
			l.at++
		default:
			return string(l.runes[from:l.at])
		}
	}
	return string(l.runes[from:])
}

// number reads digits with a point and an exponent; a sign belongs to the expression.
func (l *lexer) number() string {
	from := l.at
	digits := func() {
		for isDigit(l.peek(0)) {
			l.at++
		}
	}
	digits()
	if l.peek(0) == '.' && l.peek(1) != '.' {
		l.at++
		digits()
	}
	if e := l.peek(0); e == 'e' || e == 'E' {
		sign := 1
		if s := l.peek(1); s == '+' || s == '-' {
			sign = 2
		}
		if isDigit(l.peek(sign)) {
			l.at += sign
			digits()
		}
	}
	return string(l.runes[from:l.at])
}

// quoted reads a name in double quotes, in which \" and \\ stand for " and \.
func (l *lexer) quoted() (token, *Error) {
	t := token{kind: tokenName, column: l.at + 1}
	var name strings.Builder
	for l.at++; l.at < len(l.runes); l.at++ {
		switch r := l.runes[l.at]; {
		case r == '"':
			l.at++
			t.text = name.String()
			return t, nil
		case r == '\\' && (l.peek(1) == '"' || l.peek(1) == '\\'):
			l.at++
			name.WriteRune(l.runes[l.at])
		case unicode.IsControl(r):
			return t, &Error{Column: l.at + 1, Read: fmt.Sprintf("%q", r), Expected: `a name without control characters, or a closing "`}
		default:
			name.WriteRune(r)
		}
	}
	return t, &Error{Column: t.column, Read: "a name that is not closed", Expected: `a closing "`}
}

// isPlain says whether a name stands without quotes.
func isPlain(name string) bool {
	l := lexer{runes: []rune(name)}
	return len(l.runes) > 0 && isWordStart(l.runes[0]) && l.word() == name
}

// quote writes a name as the language has it.
func quote(name string) string {
	if isPlain(name) {
		return name
	}
	return `"` + strings.NewReplacer(`\`, `\\`, `"`, `\"`).Replace(name) + `"`
}
