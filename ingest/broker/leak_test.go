package broker_test

import (
	"bytes"
	"fmt"
	"os"
	"runtime"
	"testing"
	"time"
)

func TestMain(m *testing.M) {
	code := m.Run()
	if code == 0 {
		code = leaked()
	}
	os.Exit(code)
}

// leaked tells whether goroutines of a broker are left.
func leaked() int {
	buf := make([]byte, 1<<20)
	for range 100 {
		buf = buf[:runtime.Stack(buf[:cap(buf)], true)]
		if !bytes.Contains(buf, []byte("throatwatch/ingest/broker.")) && !bytes.Contains(buf, []byte("nats-server")) {
			return 0
		}
		time.Sleep(50 * time.Millisecond)
	}
	fmt.Printf("goroutines are left:\n%s\n", buf)
	return 1
}
