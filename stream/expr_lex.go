package stream

import (
	"fmt"
	"go/scanner"
	"go/token"
	"strconv"
	"strings"
	"unicode"
	"unicode/utf8"
)

// Limits that keep a pasted file or a generated monster from taking the
// machine down; no model written by hand comes near them.
const (
	maxExprBytes = 16 << 10
	maxExprDepth = 200
)

// exprText is the text of one expression and its role in the model, which
// every message about it names.
type exprText struct{ role, text string }

// errorf returns a UseError about the byte at off.
func (x exprText) errorf(off int, format string, args ...any) error {
	off = max(0, min(off, len(x.text)))
	return Usef("%s %s, character %d: %s", x.role, quoteExpr(x.text, off),
		utf8.RuneCountInString(x.text[:off])+1, plainLine(fmt.Sprintf(format, args...)))
}

// plainLine makes blanks of line breaks and other control characters, which
// names and pieces of a text can bring into a message.
func plainLine(s string) string {
	return strings.Map(func(r rune) rune {
		if unicode.IsControl(r) {
			return ' '
		}
		return r
	}, s)
}

// quoteExpr quotes an expression on one line, cut to the neighbourhood of off
// when it is long.
func quoteExpr(s string, off int) string {
	const around = 60
	if len(s) > 3*around {
		lo, hi := max(0, off-around), min(len(s), off+around)
		for lo > 0 && !utf8.RuneStart(s[lo]) {
			lo--
		}
		for hi < len(s) && !utf8.RuneStart(s[hi]) {
			hi++
		}
		t := s[lo:hi]
		if lo > 0 {
			t = "..." + t
		}
		if hi < len(s) {
			t += "..."
		}
		s = t
	}
	if strings.Contains(s, `"`) && strconv.CanBackquote(s) && !strings.Contains(s, "\t") {
		return "`" + s + "`"
	}
	return strconv.Quote(s)
}

func isLetter(r rune) bool { return r == '_' || unicode.IsLetter(r) }

// isWord reports whether s can stand for a column without col("...").
func isWord(s string) bool {
	for i, r := range s {
		if i == 0 && !isLetter(r) || !isLetter(r) && !unicode.IsDigit(r) && !unicode.IsMark(r) {
			return false
		}
	}
	return s != "" && utf8.ValidString(s)
}

// skipString returns the index after the string literal that starts at s[i],
// and whether it is closed.
func skipString(s string, i int) (end int, closed bool) {
	q := s[i]
	for i++; i < len(s); i++ {
		switch {
		case s[i] == q:
			return i + 1, true
		case s[i] == '\\' && q != '`':
			i++
		}
	}
	return len(s), false
}

// maskWords returns the text with every line break outside a string made a
// space and every word that Go does not take for an identifier (its keywords,
// and words with combining marks) replaced by as many underscores; names maps
// the offsets of those to the words. Offsets stay those of the text.
func maskWords(text string) (masked []byte, names map[int]string) {
	masked = []byte(text)
	for i := 0; i < len(text); {
		switch c := text[i]; {
		case c == '"' || c == '`' || c == '\'':
			i, _ = skipString(text, i)
			continue
		case c == '\n' || c == '\r' || c == '\t':
			masked[i] = ' '
			i++
			continue
		case c == '/' && i+1 < len(text) && (text[i+1] == '/' || text[i+1] == '*'):
			return masked, names // a comment, refused by the token pass
		}
		r, size := utf8.DecodeRuneInString(text[i:])
		if !isLetter(r) && !unicode.IsDigit(r) {
			i += size
			continue
		}
		start, marks := i, false
		for i < len(text) {
			q, n := utf8.DecodeRuneInString(text[i:])
			if !isLetter(q) && !unicode.IsDigit(q) {
				if !unicode.IsMark(q) {
					break
				}
				marks = true
			}
			i += n
		}
		if word := text[start:i]; isLetter(r) && (marks || token.IsKeyword(word)) {
			if names == nil {
				names = map[int]string{}
			}
			names[start] = word
			for j := start; j < i; j++ {
				masked[j] = '_'
			}
		}
	}
	return masked, names
}

// tokenHints says what to write instead of a token that is Go but no part of
// an expression here.
var tokenHints = map[token.Token]string{
	token.XOR:        "a power is written pow(x, 2)",
	token.AND:        "the logical and is written &&",
	token.OR:         "the logical or is written ||",
	token.AND_NOT:    "write && !x",
	token.SHL:        "a smaller-than comparison is written <, a power of two pow(2, x)",
	token.SHR:        "a greater-than comparison is written >",
	token.REM:        "there is no remainder; the operators are + - * / and comparisons",
	token.DEFINE:     "a comparison is written ==",
	token.INC:        "leave a space: x + +y",
	token.DEC:        "leave a space: x - -y",
	token.ARROW:      "leave a space: x < -1",
	token.LBRACK:     `a column with an odd name is written col("a[1]")`,
	token.RBRACK:     `a column with an odd name is written col("a[1]")`,
	token.LBRACE:     "only parentheses group",
	token.RBRACE:     "only parentheses group",
	token.PERIOD:     `a column with a dot in its name is written col("a.b")`,
	token.COLON:      "an interaction is written with *",
	token.SEMICOLON:  "expressions are separated by commas",
	token.ELLIPSIS:   "list the arguments one by one",
	token.TILDE:      "not is written !",
	token.IMAG:       "want a real number",
	token.COMMENT:    "comments are not allowed",
	token.CHAR:       `text is written in double quotes, "x"`,
	token.ADD_ASSIGN: "write + or ==",
	token.SUB_ASSIGN: "write - or ==",
	token.MUL_ASSIGN: "write * or ==",
	token.QUO_ASSIGN: "write / or ==",
}

// runeHints covers characters that word processors put in the place of plain
// ones.
var runeHints = map[rune]string{
	'≤': "<=", '≥': ">=", '≠': "!=", '×': "*", '·': "*", '÷': "/", '−': "-", '–': "-", '—': "-",
	'“': `"`, '”': `"`, '„': `"`, '«': `"`, '»': `"`, '‘': `"`, '’': `"`, '\u00a0': "a plain space", '\u2009': "a plain space",
}

var wordHints = map[string]string{"and": "&&", "or": "||", "not": "!"}

// scan checks the tokens of the expression and returns its text in the form
// that go/parser reads. An option's = (as in base="a") is rewritten to ^, which
// cannot occur otherwise.
func (x exprText) scan() (masked []byte, names map[int]string, err error) {
	if strings.TrimSpace(x.text) == "" {
		return nil, nil, Usef("the %s is empty, want an expression", x.role)
	}
	if len(x.text) > maxExprBytes {
		return nil, nil, x.errorf(maxExprBytes, "the expression goes on for %d bytes, want at most %d", len(x.text), maxExprBytes)
	}
	masked, names = maskWords(x.text)
	file := token.NewFileSet().AddFile("", -1, len(masked))
	var s scanner.Scanner
	failOff, failMsg := -1, ""
	s.Init(file, masked, func(p token.Position, msg string) {
		if failOff < 0 {
			failOff, failMsg = p.Offset, msg
		}
	}, scanner.ScanComments)
	var options []int
	depth, prev, prevEnd := 0, token.ILLEGAL, 0
	for {
		pos, tok, lit := s.Scan()
		off := file.Offset(pos)
		if tok == token.EOF || tok == token.SEMICOLON && lit == "\n" {
			if failOff >= 0 {
				return nil, nil, x.badRune(failOff, failMsg)
			}
			break
		}
		if tok.IsKeyword() { // only straight after a number, where no word can stand
			tok = token.IDENT
		}
		if tok == token.CHAR || tok == token.COMMENT || tok == token.TILDE {
			return nil, nil, x.errorf(off, "found %s; %s", x.snippet(off), tokenHints[tok])
		}
		if failOff >= 0 {
			if tok == token.INT || tok == token.FLOAT || tok == token.IMAG {
				return nil, nil, x.errorf(off, "found %s, want a number such as 12, 0.5 or 1e6", x.snippet(off))
			}
			return nil, nil, x.badRune(failOff, failMsg)
		}
		operand := prev == token.IDENT || prev == token.RPAREN || prev.IsLiteral()
		switch tok {
		case token.IDENT, token.STRING, token.INT, token.FLOAT:
			if operand {
				word := lit
				if w, ok := names[off]; ok {
					word = w
				}
				if h, ok := wordHints[strings.ToLower(word)]; ok && tok == token.IDENT {
					return nil, nil, x.errorf(off, "found %s; it is written %s here", word, h)
				}
				return nil, nil, x.errorf(off, "found %s where an operator or a comma must stand", word)
			}
			if tok == token.INT || tok == token.FLOAT {
				if err := x.checkNumber(off, lit); err != nil {
					return nil, nil, err
				}
			}
		case token.LPAREN:
			if operand && prev != token.IDENT {
				return nil, nil, x.errorf(off, "found ( where an operator must stand; a product is written with *")
			}
			if depth++; depth > maxExprDepth {
				return nil, nil, x.errorf(off, "nested more than %d deep", maxExprDepth)
			}
		case token.RPAREN:
			if depth--; depth < 0 {
				return nil, nil, x.errorf(off, "found ) without its (")
			}
		case token.ASSIGN:
			if prev != token.IDENT {
				return nil, nil, x.errorf(off, "found =; a comparison is written ==, <= or >=")
			}
			options = append(options, off)
		case token.MUL:
			if prev == token.MUL && prevEnd == off {
				return nil, nil, x.errorf(off-1, "found **; %s", tokenHints[token.XOR])
			}
		case token.COMMA, token.ADD, token.SUB, token.QUO, token.LAND, token.LOR, token.NOT,
			token.EQL, token.NEQ, token.LSS, token.LEQ, token.GTR, token.GEQ:
		default:
			found := tok.String()
			if tok == token.ILLEGAL || tok == token.IMAG {
				found = lit
			}
			hint, ok := tokenHints[tok]
			if !ok {
				hint = "the operators are + - * / == != < <= > >= && || !"
			}
			return nil, nil, x.errorf(off, "found %s; %s", found, hint)
		}
		prev, prevEnd = tok, off+max(len(lit), 1)
	}
	if depth > 0 {
		return nil, nil, x.errorf(len(x.text), "the text ends where ) must stand")
	}
	for _, off := range options {
		masked[off] = '^'
	}
	return masked, names, nil
}

// snippet is the text at off, a few characters of it.
func (x exprText) snippet(off int) string {
	s, n := x.text[off:], 0
	for i := range s {
		if n++; n > 12 {
			return s[:i] + "..."
		}
	}
	return strings.Join(strings.Fields(s), " ")
}

// badRune words a complaint of the Go scanner.
func (x exprText) badRune(off int, msg string) error {
	r, size := utf8.DecodeRuneInString(x.text[min(off, len(x.text)):])
	if h, ok := runeHints[r]; ok {
		return x.errorf(off, "found %q; write %s", r, h)
	}
	switch {
	case strings.Contains(msg, "illegal UTF-8"), r == utf8.RuneError && size == 1:
		return x.errorf(off, "found bytes that are not UTF-8 text")
	case strings.Contains(msg, "illegal character"):
		return x.errorf(off, "found %q, which has no meaning here; a column with an odd name is written col(\"...\")", r)
	case strings.Contains(msg, "not terminated"):
		return x.errorf(off, "the text in quotes is not closed")
	}
	return x.errorf(off, "%s", msg)
}

// checkNumber refuses spellings of numbers that mean something else elsewhere.
func (x exprText) checkNumber(off int, lit string) error {
	if len(lit) < 2 || lit[0] != '0' || lit[1] == '.' || lit[1] == 'e' || lit[1] == 'E' {
		return nil
	}
	if lit[1] >= '0' && lit[1] <= '9' || lit[1] == '_' {
		return x.errorf(off, "found %s; numbers are decimal and do not start with 0", lit)
	}
	return x.errorf(off, "found %s; numbers are decimal", lit)
}

// SplitList splits "EXPR, EXPR" at the commas that are outside parentheses and
// quotes, and trims the parts. An empty text gives no parts. A part that is
// empty, an unclosed quote and unbalanced parentheses are a UseError.
func SplitList(s string) ([]string, error) {
	if strings.TrimSpace(s) == "" {
		return nil, nil
	}
	x := exprText{"list", s}
	var parts []string
	start, depth := 0, 0
	add := func(end int) error {
		part := strings.TrimSpace(s[start:end])
		if part == "" {
			return x.errorf(end, "found nothing between two commas or at an end, want an expression")
		}
		parts = append(parts, part)
		return nil
	}
	for i := 0; i < len(s); i++ {
		switch s[i] {
		case '"', '`', '\'':
			end, closed := skipString(s, i)
			if !closed {
				return nil, x.errorf(i, "the text in quotes is not closed")
			}
			i = end - 1
		case '(':
			depth++
		case ')':
			if depth--; depth < 0 {
				return nil, x.errorf(i, "found ) without its (")
			}
		case ',':
			if depth > 0 {
				continue
			}
			if err := add(i); err != nil {
				return nil, err
			}
			start = i + 1
		}
	}
	if depth > 0 {
		return nil, x.errorf(len(s), "the text ends where ) must stand")
	}
	if err := add(len(s)); err != nil {
		return nil, err
	}
	return parts, nil
}
