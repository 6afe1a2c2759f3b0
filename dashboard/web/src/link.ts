// The live link: one websocket that comes back by itself and continues where it was.

import type { Frame } from './frames';

/** The longest wait before another try, ms. */
export const longestWait = 2000;

/** Wait before try n (0 = first after the loss): doubling from 100 ms to 2 s, up to a fifth shorter by `random` in [0, 1). */
export function backoff(n: number, random: number): number {
  return Math.min(longestWait, 100 * 2 ** Math.min(n, 10)) * (1 - 0.2 * random);
}

/** Address of the live socket beside the page. `from` = epoch.n of the last frame seen. */
export function liveURL(page: string, rig: string, from: string): string {
  const url = new URL('live', page);
  url.protocol = url.protocol === 'https:' ? 'wss:' : 'ws:';
  url.hash = '';
  url.search = `?rig=${encodeURIComponent(rig)}&channels=*&rate=20${from ? `&from=${from}` : ''}`;
  return url.href;
}

/** The part of WebSocket that the link uses; a test puts its own here. */
export interface Socket {
  onopen: ((e: never) => unknown) | null;
  onmessage: ((e: { data: unknown }) => unknown) | null;
  onclose: ((e: { code: number }) => unknown) | null;
  close(): void;
}

export interface Surroundings {
  open(url: string): Socket;
  after(ms: number, f: () => void): unknown;
  cancel(timer: unknown): void;
  random(): number;
}

/** The server closes so when its configuration changed [RFC 6455, 1012 registered]: what was known of channels and bands is void. */
export const restartCode = 1012;

/** An open socket that says nothing for this long is given up, ms. */
export const silenceLimit = 5000;

export class Link {
  connected = false;
  /** Whether it has ever been connected. */
  opened = false;
  private socket: Socket | null = null;
  private tries = 0;
  private timer: unknown = null;
  private watchdog: unknown = null;
  private stopped = false;
  private afresh = false;

  /**
   * `url` gives the address for each try, so that it carries the newest position,
   * or none when it has to begin afresh with a hello;
   * `onFrame` gets each frame that parses; `onChange` is told when connected changes.
   */
  constructor(
    private readonly around: Surroundings,
    private readonly url: (afresh: boolean) => string,
    private readonly onFrame: (f: Frame) => void,
    private readonly onChange: () => void,
  ) {}

  start(): void {
    this.stopped = false;
    const socket = this.around.open(this.url(this.afresh));
    this.socket = socket;
    this.watch();
    socket.onopen = () => {
      this.connected = this.opened = true;
      this.watch();
      this.onChange();
    };
    socket.onmessage = (e) => {
      if (socket !== this.socket) return;
      let frame: Frame;
      try {
        frame = JSON.parse(String(e.data)) as Frame;
      } catch {
        return; // one broken frame must not end the watch; silence ends the link
      }
      this.tries = 0;
      this.afresh = false;
      this.watch();
      this.onFrame(frame);
    };
    socket.onclose = (e) => {
      if (e.code === restartCode) this.afresh = true;
      this.lost(socket);
    };
  }

  stop(): void {
    this.stopped = true;
    this.around.cancel(this.timer);
    this.around.cancel(this.watchdog);
    const socket = this.socket;
    this.socket = null;
    this.connected = false;
    socket?.close();
  }

  private watch(): void {
    this.around.cancel(this.watchdog);
    const socket = this.socket;
    this.watchdog = this.around.after(silenceLimit, () => {
      if (!socket) return;
      socket.close();
      this.lost(socket); // a dead network may never report the close
    });
  }

  private lost(socket: Socket): void {
    if (socket !== this.socket || this.stopped) return;
    this.socket = null;
    this.around.cancel(this.watchdog);
    const was = this.connected;
    this.connected = false;
    if (was) this.onChange();
    this.timer = this.around.after(backoff(this.tries++, this.around.random()), () => {
      if (!this.stopped) this.start();
    });
  }
}

/** The real browser. */
export const browser: Surroundings = {
  open: (url) => new WebSocket(url) as unknown as Socket,
  after: (ms, f) => window.setTimeout(f, ms),
  cancel: (t) => window.clearTimeout(t as number),
  random: () => Math.random(),
};
