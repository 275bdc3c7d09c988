package store

import (
	"errors"
	"fmt"
	"maps"
	"math/rand/v2"
	"os"
	"path/filepath"
	"slices"
	"strings"
	"testing"

	bolt "go.etcd.io/bbolt"
)

func openTestState(t *testing.T, path string) *State {
	t.Helper()
	s, err := OpenState(path)
	if err != nil {
		t.Fatal(err)
	}
	return s
}

func put(t *testing.T, s *State, bucket, key, value string) {
	t.Helper()
	if err := s.Update(func(tx *Tx) error { return tx.Put(bucket, []byte(key), []byte(value)) }); err != nil {
		t.Fatal(err)
	}
}

func get(t *testing.T, s *State, bucket, key string) (v string) {
	t.Helper()
	if err := s.View(func(tx *Tx) error { v = string(tx.Get(bucket, []byte(key))); return nil }); err != nil {
		t.Fatal(err)
	}
	return v
}

// TestStateModel compares random transactions, some given up, with plain maps.
func TestStateModel(t *testing.T) {
	path := filepath.Join(t.TempDir(), "state.bolt")
	s := openTestState(t, path)
	r := rand.New(rand.NewPCG(1, 1))
	want := map[string]string{}
	giveUp := errors.New("given up")
	for range 150 {
		next := maps.Clone(want)
		fail := r.IntN(4) == 0
		err := s.Update(func(tx *Tx) error {
			for range 1 + r.IntN(6) {
				b, k := fmt.Sprintf("b%d", r.IntN(3)), fmt.Sprintf("k%d", r.IntN(30))
				if r.IntN(3) == 0 {
					delete(next, b+"/"+k)
					if err := tx.Delete(b, []byte(k)); err != nil {
						return err
					}
				} else {
					v := fmt.Sprint(r.Uint32())
					next[b+"/"+k] = v
					if err := tx.Put(b, []byte(k), []byte(v)); err != nil {
						return err
					}
				}
			}
			if fail {
				return giveUp
			}
			return nil
		})
		if fail != errors.Is(err, giveUp) || !fail && err != nil {
			t.Fatal(err)
		}
		if !fail {
			want = next
		}
		if r.IntN(20) == 0 {
			if err := s.Close(); err != nil {
				t.Fatal(err)
			}
			if s = openTestState(t, path); s.Unclean() {
				t.Error("a clean stop is taken for another")
			}
		}
		got := map[string]string{}
		_ = s.View(func(tx *Tx) error {
			for b := range 3 {
				b := fmt.Sprintf("b%d", b)
				var keys []string
				for k, v := range tx.Scan(b, []byte("k")) {
					got[b+"/"+string(k)] = string(v)
					keys = append(keys, string(k))
				}
				if !slices.IsSorted(keys) {
					t.Errorf("keys out of order: %v", keys)
				}
			}
			return nil
		})
		if !maps.Equal(got, want) {
			t.Fatalf("got %v, want %v", got, want)
		}
	}
	if err := s.Close(); err != nil {
		t.Fatal(err)
	}
	if err := Check(path); err != nil {
		t.Error(err)
	}
}

func TestStateScanPrefixAndNames(t *testing.T) {
	s := openTestState(t, filepath.Join(t.TempDir(), "state.bolt"))
	defer s.Close()
	for _, k := range []string{"a/1", "a/2", "b/1"} {
		put(t, s, "x", k, k)
	}
	n := 0
	_ = s.View(func(tx *Tx) error {
		for range tx.Scan("x", []byte("a/")) {
			n++
		}
		for range tx.Scan("nothing", nil) {
			n += 100
		}
		for range tx.Scan("midwatch", nil) {
			n += 1000
		}
		return nil
	})
	if n != 2 {
		t.Errorf("walked %d, want 2", n)
	}
	for _, b := range []string{"", "midwatch"} {
		if err := s.Update(func(tx *Tx) error { return tx.Put(b, []byte("k"), nil) }); err == nil {
			t.Errorf("bucket %q was taken", b)
		}
	}
}

// TestStatePanic holds that a panic of the caller stays one, rolls back, and is
// not taken for a damaged file.
func TestStatePanic(t *testing.T) {
	s := openTestState(t, filepath.Join(t.TempDir(), "state.bolt"))
	defer s.Close()
	func() {
		defer func() {
			if r := recover(); r != "mistake" {
				t.Errorf("recovered %v", r)
			}
		}()
		_ = s.Update(func(tx *Tx) error {
			if err := tx.Put("x", []byte("k"), []byte("v")); err != nil {
				return err
			}
			panic("mistake")
		})
	}()
	if v := get(t, s, "x", "k"); v != "" {
		t.Errorf("rolled back, yet %q is there", v)
	}
	put(t, s, "x", "k", "w")
}

func TestStateUncleanStop(t *testing.T) {
	path := filepath.Join(t.TempDir(), "state.bolt")
	if u, err := UncleanStop(path); u || err != nil {
		t.Errorf("no file: %v, %v", u, err)
	}
	s := openTestState(t, path)
	if _, err := UncleanStop(path); !errors.Is(err, ErrInUse) {
		t.Errorf("open file: %v, want in use", err)
	}
	if _, err := OpenState(path); !errors.Is(err, ErrInUse) {
		t.Errorf("opened twice: %v, want in use", err)
	}
	if err := s.Close(); err != nil {
		t.Fatal(err)
	}
	if u, err := UncleanStop(path); u || err != nil {
		t.Errorf("after a clean stop: %v, %v", u, err)
	}
	s = openTestState(t, path)
	if err := s.db.Close(); err != nil { // as if killed
		t.Fatal(err)
	}
	if u, err := UncleanStop(path); !u || err != nil {
		t.Errorf("after a kill: %v, %v", u, err)
	}
	if s = openTestState(t, path); !s.Unclean() {
		t.Error("a kill is taken for a clean stop")
	}
	s.Close()
}

// TestStateDamaged spoils the file: the backup takes its place, or a new file
// if there is none, and both is said.
func TestStateDamaged(t *testing.T) {
	for _, backup := range []bool{true, false} {
		for _, size := range []int64{100, 5000, 3 * pageBytes} {
			t.Run(fmt.Sprintf("backup %v, cut to %d", backup, size), func(t *testing.T) {
				path := filepath.Join(t.TempDir(), "state.bolt")
				s := openTestState(t, path)
				put(t, s, "episodes", "1", "old")
				if backup {
					if err := s.Backup(); err != nil {
						t.Fatal(err)
					}
				}
				put(t, s, "episodes", "1", strings.Repeat("new", 5000))
				if err := s.Close(); err != nil {
					t.Fatal(err)
				}
				if err := os.Truncate(path, size); err != nil {
					t.Fatal(err)
				}
				s = openTestState(t, path)
				defer s.Close()
				want := map[bool]string{true: "old", false: ""}[backup]
				if v := get(t, s, "episodes", "1"); v != want {
					t.Errorf("got %.20q, want %q", v, want)
				}
				if ps := s.Problems(); len(ps) != 1 || ps[0].Kind != Damaged || !strings.Contains(ps[0].Path, ".damaged-1") {
					t.Errorf("problems %v", ps)
				}
			})
		}
	}
}

// TestBackupIsVerified holds that a spoiled state does not replace a good copy.
func TestBackupIsVerified(t *testing.T) {
	path := filepath.Join(t.TempDir(), "state.bolt")
	s := openTestState(t, path)
	for i := range 200 {
		put(t, s, "x", fmt.Sprintf("%03d", i), strings.Repeat("v", 300))
	}
	if err := s.Backup(); err != nil {
		t.Fatal(err)
	}
	f, err := os.OpenFile(path, os.O_RDWR, 0)
	if err != nil {
		t.Fatal(err)
	}
	b, _ := os.ReadFile(path)
	for p := 4; p < usedPages(b); p++ {
		if _, err := f.WriteAt(make([]byte, pageBytes), int64(p*pageBytes)); err != nil {
			t.Fatal(err)
		}
	}
	f.Close()
	if err := s.Backup(); !errors.Is(err, ErrDamaged) {
		t.Errorf("backup of a spoiled state says %v", err)
	}
	if err := Check(path + BackupSuffix); err != nil {
		t.Errorf("the good copy is gone: %v", err)
	}
	if _, err := os.Stat(path + BackupSuffix + ".new"); !errors.Is(err, os.ErrNotExist) {
		t.Errorf("the bad copy was left behind: %v", err)
	}
	_ = guard(path, s.db.Close)
}

// TestUnknownVersion holds that files of another version are refused in words,
// not guessed at and not set aside.
func TestUnknownVersion(t *testing.T) {
	dir := t.TempDir()
	path := filepath.Join(dir, "state.bolt")
	s := openTestState(t, path)
	if err := s.db.Update(func(tx *bolt.Tx) error { return tx.Bucket(bucketStateHead).Put(keyFormat, []byte{9}) }); err != nil {
		t.Fatal(err)
	}
	s.Close()
	_, err := OpenState(path)
	if !errors.Is(err, errVersion) || !strings.Contains(err.Error(), "format 9") || !strings.Contains(err.Error(), "hint") {
		t.Errorf("state: %v", err)
	}
	w := open(t, dir, Options{}, loopList(1))
	w.Append(0, plain(1, 1))
	flush(t, w)
	err = w.slices[0].update(func(tx *bolt.Tx) error {
		b := encodeFixed(w.slices[0])
		b[0] = 9
		return tx.Bucket(bucketHead).Put(keyFixed, b)
	})
	if err != nil {
		t.Fatal(err)
	}
	if err := w.Close(); err != nil {
		t.Fatal(err)
	}
	if _, err = OpenWindow(dir, Options{}); !errors.Is(err, errVersion) || !strings.Contains(err.Error(), "format 9") {
		t.Errorf("window: %v", err)
	}
	if all, _ := filepath.Glob(filepath.Join(dir, "*.damaged-*")); len(all) != 0 {
		t.Errorf("set aside: %v", all)
	}
}
