package mqtt

import (
	"crypto/rand"
	"encoding/hex"
	"errors"
	"fmt"
	"io/fs"
	"net/url"
	"os"
	"path/filepath"
	"strings"
)

// clientID is the configured one, or midwatch-<site>-<8 hex>. The random part is
// kept in the state folder, one per source, so that the broker sees the same
// client after a restart. The id is usable even when err says it cannot be kept.
func (s *source) clientID() (id string, err error) {
	if s.cfg.ClientID != "" {
		return s.cfg.ClientID, nil
	}
	site := strings.Map(func(r rune) rune {
		switch {
		case r >= 'a' && r <= 'z', r >= '0' && r <= '9':
			return r
		case r >= 'A' && r <= 'Z':
			return r + 'a' - 'A'
		case r == ' ', r == '-', r == '_':
			return '-'
		}
		return -1
	}, s.site)
	part, err := s.keptPart()
	return "midwatch-" + site[:min(len(site), 24)] + "-" + part, err
}

func (s *source) keptPart() (string, error) {
	var b [4]byte
	rand.Read(b[:])
	fresh := hex.EncodeToString(b[:])
	if s.opts.StateDir == "" {
		return fresh, nil
	}
	file := filepath.Join(s.opts.StateDir, "mqtt-client-id-"+url.PathEscape(s.name))
	old, err := os.ReadFile(file)
	if err == nil {
		if text := strings.TrimSpace(string(old)); len(text) == 8 && isHex(text) {
			return text, nil
		}
	} else if !errors.Is(err, fs.ErrNotExist) {
		return fresh, err
	}
	// Written beside and renamed, so that a power cut leaves no half id.
	tmp, err := os.CreateTemp(s.opts.StateDir, ".mqtt-client-id-*")
	if err != nil {
		return fresh, err
	}
	_, err = fmt.Fprintln(tmp, fresh)
	if err = errors.Join(err, tmp.Sync(), tmp.Close()); err == nil {
		err = os.Rename(tmp.Name(), file)
	}
	if err != nil {
		os.Remove(tmp.Name())
	}
	return fresh, err
}

func isHex(s string) bool {
	_, err := hex.DecodeString(s)
	return err == nil
}
