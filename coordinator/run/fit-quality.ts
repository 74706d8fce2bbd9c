import type { Chosen } from './choose.js';
import type { Description } from './description.js';
import type { Grounds } from './problems.js';
import type { FitQualityDocument, OmittedPart } from './result-parts.js';
import { memberName } from './run.js';

/** A Pearson dispersion from here on is called more spread than the model allows (common practice, no source). */
const SPREAD_LARGE = 1.5;

/** How well the fit describes the rows, from sums and binned counts. */
export function qualityOf(
  grounds: Grounds,
  description: Description,
  chosen: Chosen,
  omitted: OmittedPart[],
): FitQualityDocument | null {
  const { survey, specification, roster, frame } = grounds;
  const { end, quality } = description;
  if (quality === null) return null;
  const n = survey.rowsTotal;
  const deviance = 2 * (n * end.loss - survey.response.saturatedLoss);
  const { nullLoss } = description;
  const nullDeviance = nullLoss === null ? null : 2 * (n * nullLoss - survey.response.saturatedLoss);
  if (nullDeviance === null)
    omitted.push({
      part: 'share of deviance explained',
      reason:
        'the deviance of an intercept alone is not known in closed form for this loss or with an offset',
    });
  const pearson = quality.reduce((sum, own) => sum + own.pearsonSquares, 0);
  const pearsonDispersion = pearson / Math.max(1, n - frame.p);
  const isLogistic = specification.loss.kind === 'logistic';
  const cross = chosen.document?.crossValidation ?? null;
  const zeros = quality.every((own) => own.zeros !== null)
    ? quality.reduce(
        (sum, own) => ({
          observed: sum.observed + (own.zeros?.observed ?? 0),
          expected: sum.expected + (own.zeros?.expected ?? 0),
        }),
        { observed: 0, expected: 0 },
      )
    : null;
  return {
    deviance,
    nullDeviance,
    devianceExplained: nullDeviance === null || nullDeviance === 0 ? null : 1 - deviance / nullDeviance,
    crossValidatedDeviance:
      cross === null || chosen.document === null ? null : cross.mean[chosen.document.chosen],
    calibration: calibrationOf(quality),
    ranking: isLogistic ? rankingOf(quality) : null,
    residuals: quality.map((own, i) => {
      const mean = own.pearsonSum / own.rows;
      const sd = Math.sqrt(Math.max(0, own.pearsonSquares / own.rows - mean * mean));
      return { site: memberName(roster[i]), rows: own.rows, mean, sd };
    }),
    leverage: quality.flatMap(({ leverage, rows }, i) =>
      leverage === null
        ? []
        : [
            {
              site: memberName(roster[i]),
              mean: leverage.sum / rows,
              most: leverage.most,
              rowsHigh: leverage.rowsHigh,
            },
          ],
    ),
    pearsonDispersion,
    zeros,
    words: wordsOf(specification.loss.kind, pearsonDispersion, zeros),
  };
}

type Quality = readonly Pick<
  NonNullable<Description['quality']>[number],
  'binRows' | 'binPredicted' | 'binObserved' | 'rowsSuppressed'
>[];

function binsOf(quality: Quality): { rows: number; predicted: number; observed: number }[] {
  return [...quality[0].binRows.keys()].map((k) => ({
    rows: quality.reduce((sum, own) => sum + own.binRows[k], 0),
    predicted: quality.reduce((sum, own) => sum + own.binPredicted[k], 0),
    observed: quality.reduce((sum, own) => sum + own.binObserved[k], 0),
  }));
}

function calibrationOf(quality: Quality): FitQualityDocument['calibration'] {
  const bins = binsOf(quality)
    .filter(({ rows }) => rows > 0)
    .map(({ rows, predicted, observed }) => ({
      rows,
      predicted: predicted / rows,
      observed: observed / rows,
    }));
  return { bins, rowsSuppressed: quality.reduce((sum, own) => sum + own.rowsSuppressed, 0) };
}

/** The ranking curve from the bins, highest predictions first; its area counts ties within a bin as half. */
export function rankingOf(quality: Quality): FitQualityDocument['ranking'] {
  const bins = binsOf(quality).filter(({ rows }) => rows > 0);
  const events = bins.reduce((sum, { observed }) => sum + observed, 0);
  const others = bins.reduce((sum, { rows, observed }) => sum + rows - observed, 0);
  if (!(events > 0 && others > 0)) return null;
  const curve = [{ falseShare: 0, trueShare: 0 }];
  let area = 0;
  for (const { rows, observed } of bins.reverse()) {
    const last = curve[curve.length - 1];
    const next = {
      falseShare: last.falseShare + (rows - observed) / others,
      trueShare: last.trueShare + observed / events,
    };
    area += (next.falseShare - last.falseShare) * 0.5 * (next.trueShare + last.trueShare);
    curve.push(next);
  }
  return { area, curve };
}

function wordsOf(
  loss: string,
  dispersion: number,
  zeros: { readonly observed: number; readonly expected: number } | null,
): string[] {
  const words: string[] = [];
  if (loss === 'poisson' && dispersion >= SPREAD_LARGE)
    words.push(
      `Counts are ${dispersion.toFixed(1)} times as spread as a Poisson model allows: standard errors of the model are too small; use the sandwich.`,
    );
  if (zeros !== null && zeros.observed > zeros.expected + 3 * Math.sqrt(zeros.expected))
    words.push(
      `${Math.round(zeros.observed)} rows hold a zero where ${Math.round(zeros.expected)} are expected: some rows may never count anything.`,
    );
  return words;
}
