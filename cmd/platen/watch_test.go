package main

import (
	"bytes"
	"context"
	"fmt"
	"os"
	"strings"
	"testing"

	"platen/store"
)

// A second service on the same state folder is refused, and told whose it is.
func TestSecondServiceIsRefused(t *testing.T) {
	state, export := t.TempDir(), t.TempDir()
	first, err := store.Open(state, store.Options{Owner: "watching the first folder"})
	if err != nil {
		t.Fatal(err)
	}
	defer first.Close()
	var out bytes.Buffer
	code := execute(context.Background(), []string{"watch", "--state", state, "--until-idle", export}, streams{&out, &out})
	if code == exitOK {
		t.Error("a second service was let in")
	}
	for _, want := range []string{fmt.Sprintf("process %d", os.Getpid()), "watching the first folder", "stop that one first"} {
		if !strings.Contains(out.String(), want) {
			t.Errorf("%q does not say %q", out.String(), want)
		}
	}
}
