import type { Frame, Run as RunInfo } from '../src/frames';

export const runLength: number;
export const scanRate: number;
export class Run {
  constructor(id: string, number: number, start: number, seed: number, epoch?: number, n?: number);
  readonly info: RunInfo;
  readonly time: number;
  readonly done: boolean;
  next(): Frame[];
  hello(): Frame;
}
