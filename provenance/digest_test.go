package provenance

import (
	"bytes"
	"context"
	"errors"
	"fmt"
	"io"
	"os"
	"path/filepath"
	"strings"
	"syscall"
	"testing"
)

// SHA-256 examples of FIPS 180-4 (and the empty message, common beside them);
// the digests were checked with coreutils sha256sum.
var vectors = []struct{ message, sum string }{
	{"", "e3b0c44298fc1c149afbf4c8996fb92427ae41e4649b934ca495991b7852b855"},
	{"abc", "ba7816bf8f01cfea414140de5dae2223b00361a396177a9cb410ff61f20015ad"},
	{"abcdbcdecdefdefgefghfghighijhijkijkljklmklmnlmnomnopnopq", "248d6a61d20638b8e5c026930c3e6039a33ce45964ff2167f6ecedd419db06c1"},
	{"abcdefghbcdefghicdefghijdefghijkefghijklfghijklmghijklmnhijklmnoijklmnopjklmnopqklmnopqrlmnopqrsmnopqrstnopqrstu", "cf5b16a778af8380036ce59e7b0492370b249b11e8f07a51afac45037afee9d1"},
	{strings.Repeat("a", 1000000), "cdc76e5c9914fb9281a1c7e284d73e67f1809a48a497200e046d39ccc7112cd0"},
}

func TestDigest(t *testing.T) {
	dir := t.TempDir()
	for i, v := range vectors {
		path := filepath.Join(dir, fmt.Sprint(i))
		if err := os.WriteFile(path, []byte(v.message), 0o644); err != nil {
			t.Fatal(err)
		}
		sum, n, err := DigestFile(context.Background(), path)
		if sum != v.sum || n != int64(len(v.message)) || err != nil {
			t.Errorf("vector %d, file: %s, %d, %v", i, sum, n, err)
		}
		// Beside a writer, in pieces, and asked in between.
		var d Digester
		var copied bytes.Buffer
		w := io.MultiWriter(&copied, &d)
		half := len(v.message) / 3
		io.WriteString(w, v.message[:half])
		d.Sum()
		io.WriteString(w, v.message[half:])
		if d.Sum() != v.sum || d.Bytes() != int64(len(v.message)) || copied.String() != v.message {
			t.Errorf("vector %d, beside a writer: %s, %d", i, d.Sum(), d.Bytes())
		}
	}
}

func TestDigestFileRefuses(t *testing.T) {
	dir := t.TempDir()
	if _, _, err := DigestFile(context.Background(), filepath.Join(dir, "none")); !errors.Is(err, os.ErrNotExist) {
		t.Errorf("no file: %v", err)
	}
	if _, _, err := DigestFile(context.Background(), dir); err == nil || !strings.Contains(err.Error(), "a folder") {
		t.Errorf("folder: %v", err)
	}
	file := filepath.Join(dir, "file")
	if err := os.WriteFile(file, []byte("x"), 0o644); err != nil {
		t.Fatal(err)
	}
	ctx, cancel := context.WithCancel(context.Background())
	cancel()
	if _, _, err := DigestFile(ctx, file); !errors.Is(err, context.Canceled) {
		t.Errorf("after the end of the context: %v", err)
	}
	pipe := filepath.Join(dir, "pipe")
	if err := syscall.Mkfifo(pipe, 0o600); err != nil {
		t.Skip("no pipes here: ", err)
	}
	if _, _, err := DigestFile(context.Background(), pipe); err == nil || !strings.Contains(err.Error(), "a pipe") {
		t.Errorf("pipe: %v", err) // opening it would wait for ever
	}
}

// FIPS 180-4, the example of one block.
func ExampleDigester() {
	var d Digester
	fmt.Fprint(&d, "abc")
	fmt.Println(d.Sum(), d.Bytes())
	// Output: ba7816bf8f01cfea414140de5dae2223b00361a396177a9cb410ff61f20015ad 3
}
