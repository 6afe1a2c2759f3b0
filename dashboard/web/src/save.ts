// Takes a file from the server piece by piece, so that a person sees how far it is
// and can call it off.

/** The name that the server gives a file [RFC 6266 4.3], or the one beside it. */
export function fileName(disposition: string | null, otherwise: string): string {
  return /filename="([^"\\/]+)"/.exec(disposition ?? '')?.[1] ?? otherwise;
}

/** Pieces are put together when they reach this size, bytes: a browser can lay whole blobs aside on the disk. */
const part = 16_000_000;

/**
 * Reads the body of a reply whole; `came` is told the bytes so far. A body that
 * breaks off is an error: nothing of it is kept.
 */
export async function receive(reply: Response, came: (bytes: number) => void): Promise<Blob> {
  const reader = (reply.body as ReadableStream<Uint8Array<ArrayBuffer>>).getReader();
  const whole: Blob[] = [];
  let pieces: Uint8Array<ArrayBuffer>[] = [];
  let [bytes, held] = [0, 0];
  const gather = (): void => {
    whole.push(new Blob(pieces));
    [pieces, held] = [[], 0];
  };
  for (;;) {
    const { done, value } = await reader.read();
    if (done) break;
    pieces.push(value);
    bytes += value.length;
    held += value.length;
    if (held >= part) gather();
    came(bytes);
  }
  gather();
  return new Blob(whole, { type: reply.headers.get('Content-Type') ?? '' });
}
