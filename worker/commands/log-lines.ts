import { describeFailure } from '../../protocol/failure.js';
import type { WorkerEvent } from '../service/events.js';
import { sizeText } from '../service/size.js';
import { counted, duration, grouped } from './terminal.js';

export type LogLevel = 'info' | 'warn' | 'error';

export function levelOf(event: WorkerEvent): LogLevel {
  if (event.event === 'stopped') return event.failure === null ? 'info' : 'error';
  return event.event === 'refused' || event.event === 'warning' || event.event === 'disconnected'
    ? 'warn'
    : 'info';
}

/** An event as one sentence of the worker's log. */
export function sentenceOf(event: WorkerEvent): string {
  switch (event.event) {
    case 'connected':
      return `Connected to ${event.url} as ${memberWords(event)} (${event.coordinator}), with the kernel ${event.kernel}.`;
    case 'disconnected':
      return disconnected(event);
    case 'run':
      return `Run ${event.run}: "${event.title}", digest ${event.digest}.`;
    case 'table': {
      const dropped = event.rowsDropped === 0 ? '' : ` (${grouped(event.rowsDropped)} left out)`;
      const read = `${counted(event.rowsUsed, 'row')}${dropped}`;
      const kept = event.bytesOnDisk === 0 ? '' : `; ${sizeText(event.bytesOnDisk)} of them are kept on disk`;
      return `Read ${read} as ${counted(event.columns, 'design column')} in ${duration(event.tookMs)}${kept}.`;
    }
    case 'answered':
      return answered(event);
    case 'refused':
      return `Refused ask ${event.ask} of run ${event.run}: ${describeFailure(event.failure)}`;
    case 'skipped':
      return `Skipped ask ${event.ask} of run ${event.run}: ask ${event.newest} is the newest.`;
    case 'run-ended':
      return `Run ${event.run} ended: ${event.outcome}. In all ${leftWords(event)} left, in ${counted(event.asks, 'answer')}.`;
    case 'warning':
      return event.message;
    case 'stopping':
      return `Stopping: ${counted(event.answersOpen, 'answer')} in the making, at most ${duration(event.graceMs)}.`;
    case 'stopped':
      return event.failure === null ? 'Stopped.' : `Stopped: ${describeFailure(event.failure)}`;
  }
}

function disconnected(event: Extract<WorkerEvent, { event: 'disconnected' }>): string {
  const reason = event.reason.replace(/\.$/, '');
  const why = reason === '' ? '' : `: ${reason}`;
  const what = event.closeCode === null ? 'Not connected' : `Link lost (${event.closeCode})`;
  return `${what}${why}. Trying again in ${duration(event.retryMs)}.`;
}

function answered(event: Extract<WorkerEvent, { event: 'answered' }>): string {
  const what = `Ask ${event.ask} (${event.asked.join('; ')}) answered in ${duration(event.tookMs)}`;
  const left = `${leftWords(event)} left (${event.kinds.join(', ')})`;
  return event.repeated
    ? `${what} once more: ${left}, counted before.`
    : `${what}: ${left}, ${grouped(event.runNumbers)} in this run.`;
}

const leftWords = (left: { readonly numbers: number; readonly curvature: number }): string => {
  const numbers = counted(left.numbers, 'number');
  const matrices = counted(left.curvature, 'curvature matrix', 'curvature matrices');
  return left.curvature === 0 ? numbers : `${numbers} with ${matrices}`;
};

const memberWords = (member: { site: string; shard: { index: number; of: number } }): string =>
  member.shard.of === 1 ? member.site : `${member.site}, shard ${member.shard.index} of ${member.shard.of}`;
