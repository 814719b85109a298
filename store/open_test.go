package store

import (
	"bytes"
	"errors"
	"io/fs"
	"os"
	"path/filepath"
	"slices"
	"strings"
	"testing"

	"go.etcd.io/bbolt"
)

func TestMigrationsReachTheSchema(t *testing.T) {
	if len(migrations) != schema {
		t.Errorf("%d migrations lead to schema %d", len(migrations), schema)
	}
}

func TestMigrationIsAllOrNothing(t *testing.T) {
	s := open(t, t.TempDir(), Options{})
	putOne(t, s, entry("/x/a.tsv", "a"))
	step := func(name string) migration {
		return func(tx *bbolt.Tx) error { _, err := tx.CreateBucket([]byte(name)); return err }
	}
	number := func() (n int) {
		if err := s.view(func(tx *bbolt.Tx) (err error) {
			n, err = get[int](tx.Bucket(bucketMeta), keySchema)
			if tx.Bucket([]byte("two")) != nil && n < 2 {
				t.Error("half a migration is there")
			}
			return err
		}); err != nil {
			t.Fatal(err)
		}
		return n
	}
	steps := append(slices.Clone(migrations), step("two"), step("results")) // the last is there already
	err := s.update(func(tx *bbolt.Tx) error { return migrate(tx, schema, steps) })
	if err == nil || number() != schema {
		t.Errorf("a failing step: %v, schema %d", err, number())
	}
	steps[schema+1] = step("three")
	if err := s.update(func(tx *bbolt.Tx) error { return migrate(tx, schema, steps) }); err != nil || number() != schema+2 {
		t.Errorf("two steps: %v, schema %d", err, number())
	}
}

func TestNewerStoreIsRefusedUntouched(t *testing.T) {
	folder := t.TempDir()
	s := open(t, folder, Options{})
	putOne(t, s, entry("/x/a.tsv", "a"))
	if err := s.update(func(tx *bbolt.Tx) error { return put(tx.Bucket(bucketMeta), keySchema, schema+1) }); err != nil {
		t.Fatal(err)
	}
	s.Close()
	before := must[[]byte](t)(os.ReadFile(s.file.path))
	for _, open := range []func() (*Store, error){
		func() (*Store, error) { return Open(folder, Options{}) },
		func() (*Store, error) { return Open(folder, Options{SetAside: true}) },
		func() (*Store, error) { return Read(folder) },
	} {
		var newer *SchemaError
		if _, err := open(); !errors.As(err, &newer) || newer.Found != schema+1 || !strings.Contains(err.Error(), "newer version") {
			t.Errorf("a newer store: %v", err)
		}
	}
	if !bytes.Equal(before, must[[]byte](t)(os.ReadFile(s.file.path))) {
		t.Error("it has changed")
	}
	if _, err := os.Stat(s.lock.owner); !errors.Is(err, fs.ErrNotExist) {
		t.Error("it counts as in use")
	}
}

func TestFoldersThatCannotHoldTheState(t *testing.T) {
	dir := t.TempDir()
	file := filepath.Join(dir, "file")
	if err := os.WriteFile(file, []byte("mine"), 0o600); err != nil {
		t.Fatal(err)
	}
	taken := filepath.Join(dir, "taken")
	if err := os.MkdirAll(filepath.Join(taken, "platen.db"), 0o700); err != nil {
		t.Fatal(err)
	}
	locked := filepath.Join(dir, "locked")
	if err := os.Mkdir(locked, 0o500); err != nil {
		t.Fatal(err)
	}
	cases := map[string]string{"a file in the way": file, "a file above": filepath.Join(file, "x"), "a folder for platen.db": taken}
	if os.Getuid() > 0 {
		cases["a read-only folder"] = locked
	} else {
		t.Log("the administrator may write to read-only folders: a file in the way stands for one")
	}
	for name, folder := range cases {
		var f *FolderError
		_, err := Open(folder, Options{SetAside: true})
		if !errors.As(err, &f) || !strings.Contains(err.Error(), "--state") {
			t.Errorf("%s: %v", name, err)
		}
	}
	if got := must[[]byte](t)(os.ReadFile(file)); string(got) != "mine" {
		t.Errorf("the file in the way is now %q", got)
	}
}

func TestFirstOpen(t *testing.T) {
	folder := filepath.Join(t.TempDir(), "a", "b")
	if _, err := Read(folder); !errors.Is(err, fs.ErrNotExist) {
		t.Errorf("read before: %v", err)
	}
	// What a crash of an earlier first start left.
	if err := os.MkdirAll(folder, 0o700); err != nil {
		t.Fatal(err)
	}
	if err := os.WriteFile(filepath.Join(folder, "platen.db.new"), []byte("half"), 0o600); err != nil {
		t.Fatal(err)
	}
	s := open(t, folder, Options{})
	inOrder(t, s)
	r := must[*Store](t)(Read(folder))
	if rs := must[[]Record](t)(r.Results(Filter{})); len(rs) != 0 {
		t.Errorf("a new store has %s", refs(rs))
	}
	if _, err := r.Put(entry("/x/a.tsv", "a")); !errors.Is(err, ErrReadOnly) {
		t.Errorf("put by a reader: %v", err)
	}
	if err := errors.Join(r.Close(), s.Close(), s.Close()); err != nil {
		t.Error(err)
	}
	if _, err := s.Put(entry("/x/a.tsv", "a")); !errors.Is(err, ErrClosed) {
		t.Errorf("put after the end: %v", err)
	}
	if _, err := s.Results(Filter{}); !errors.Is(err, ErrClosed) {
		t.Errorf("listed after the end: %v", err)
	}
	entries := must[[]os.DirEntry](t)(os.ReadDir(folder))
	names := ""
	for _, e := range entries {
		names += e.Name() + " "
	}
	if names != "platen.db platen.lock " {
		t.Errorf("left behind: %s", names)
	}
}

// Someone removes or empties the file under a running service.
func TestFileTakenAway(t *testing.T) {
	s := open(t, t.TempDir(), Options{})
	putOne(t, s, entry("/x/a.tsv", "a"))
	kept := must[[]byte](t)(os.ReadFile(s.file.path))
	if err := os.Remove(s.file.path); err != nil {
		t.Fatal(err)
	}
	if _, err := s.Put(entry("/x/b.tsv", "b")); !errors.Is(err, fs.ErrNotExist) {
		t.Errorf("removed: %v", err)
	}
	if err := os.WriteFile(s.file.path, kept, 0o600); err != nil {
		t.Fatal(err)
	}
	putOne(t, s, entry("/x/b.tsv", "b"))

	// Shortened, what bbolt maps lies beyond the end: reading there must not end
	// the process.
	r := must[*Store](t)(Read(s.folder))
	if err := os.Truncate(s.file.path, int64(2*os.Getpagesize())); err != nil {
		t.Fatal(err)
	}
	var d *DamagedError
	if rs, err := r.Results(Filter{}); !errors.As(err, &d) {
		t.Errorf("shortened: %s, %v", refs(rs), err)
	}
	if err := os.Truncate(s.file.path, 0); err != nil {
		t.Fatal(err)
	}
	if _, err := s.Put(entry("/x/c.tsv", "c")); !errors.As(err, &d) {
		t.Errorf("emptied: %v", err)
	}
	if info, err := os.Stat(s.file.path); err != nil || info.Size() != 0 {
		t.Errorf("written to: %v, %v", info, err)
	}
}
