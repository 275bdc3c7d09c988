package page

import (
	"bufio"
	"bytes"
	"crypto/sha256"
	"encoding/csv"
	"encoding/hex"
	"errors"
	"fmt"
	"io"
	"os"
	"slices"
	"strings"
	"sync"
	"time"
)

// Role says what a token is good for.
type Role string

const (
	RoleView Role = "view" // look
	RoleAct  Role = "act"  // look, acknowledge, shelve
)

// Token is one named token of the tokens file. The token itself is not kept,
// only its SHA-256.
type Token struct {
	Name    string
	Role    Role
	Hash    [sha256.Size]byte
	Expires time.Time
}

const tokensHint = "hint: a line is name,role,sha256,expires; role is view or act, sha256 as of `printf %s TOKEN | sha256sum`, expires a day such as 2027-06-30"

// ReadTokens reads a tokens file: CSV with the header
// name,role,sha256,expires. All mistakes are reported, with their lines. A
// token is good to the end of its last day, UTC.
func ReadTokens(r io.Reader, name string) ([]Token, error) {
	text, err := io.ReadAll(io.LimitReader(r, 1<<20))
	if err != nil {
		return nil, fmt.Errorf("%s: %w", name, err)
	}
	c := csv.NewReader(bufio.NewReader(bytes.NewReader(text)))
	c.Comment, c.FieldsPerRecord, c.TrimLeadingSpace = '#', 4, true
	var out []Token
	var bad []error
	for row := 0; ; row++ {
		x, err := c.Read()
		if err == io.EOF {
			break
		}
		if err != nil {
			bad = append(bad, fmt.Errorf("%s: %w; %s", name, err, tokensHint))
			if _, ok := errors.AsType[*csv.ParseError](err); ok && errors.Is(err, csv.ErrFieldCount) {
				continue
			}
			break
		}
		line, _ := c.FieldPos(0)
		if row == 0 && strings.EqualFold(x[0], "name") {
			continue
		}
		t, err := readToken(x)
		if err == nil && slices.ContainsFunc(out, func(o Token) bool { return o.Name == t.Name }) {
			err = fmt.Errorf("name %q is there twice", t.Name)
		}
		if err != nil {
			bad = append(bad, fmt.Errorf("%s:%d: %w; %s", name, line, err, tokensHint))
			continue
		}
		out = append(out, t)
	}
	if len(bad) > 0 {
		return nil, errors.Join(bad...)
	}
	if len(out) == 0 {
		return nil, fmt.Errorf("%s: no token in it; %s", name, tokensHint)
	}
	return out, nil
}

func readToken(x []string) (Token, error) {
	t := Token{Name: strings.TrimSpace(x[0]), Role: Role(strings.TrimSpace(x[1]))}
	if t.Name == "" || len(t.Name) > 100 {
		return t, errors.New("a name of 1 to 100 bytes is wanted")
	}
	if t.Role != RoleView && t.Role != RoleAct {
		return t, fmt.Errorf("role %q is unknown", x[1])
	}
	h, err := hex.DecodeString(strings.TrimSpace(x[2]))
	if err != nil || len(h) != sha256.Size {
		return t, errors.New("sha256 is 64 hexadecimal digits; the token itself must not stand here")
	}
	t.Hash = [sha256.Size]byte(h)
	day, err := time.Parse(time.DateOnly, strings.TrimSpace(x[3]))
	if err != nil {
		return t, fmt.Errorf("expires %q is no day", x[3])
	}
	t.Expires = day.Add(24 * time.Hour)
	return t, nil
}

// tokenFile reads the file anew when it changes, so that a token can be taken
// back without a restart. A file that went wrong keeps what it said before.
type tokenFile struct {
	path string
	mu   sync.Mutex
	seen time.Time
	size int64
	list []Token
}

func openTokens(path string) (*tokenFile, error) {
	f := &tokenFile{path: path}
	return f, f.read()
}

func (f *tokenFile) read() error {
	st, err := os.Stat(f.path)
	if err != nil {
		return fmt.Errorf("page.tokens_file: %w", err)
	}
	if st.ModTime().Equal(f.seen) && st.Size() == f.size {
		return nil
	}
	if st.Mode().Perm()&0o007 != 0 {
		return fmt.Errorf("page.tokens_file: %s can be read by everybody; hint: chmod 0640", f.path)
	}
	b, err := os.ReadFile(f.path)
	if err != nil {
		return fmt.Errorf("page.tokens_file: %w", err)
	}
	list, err := ReadTokens(bytes.NewReader(b), f.path)
	if err != nil {
		return err
	}
	f.seen, f.size, f.list = st.ModTime(), st.Size(), list
	return nil
}

// tokens in force, and why the file could not be read anew.
func (f *tokenFile) tokens() ([]Token, error) {
	f.mu.Lock()
	defer f.mu.Unlock()
	err := f.read()
	return f.list, err
}
