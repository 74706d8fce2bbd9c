import { type Checked, fail, succeed } from '../../protocol/failure.js';
import type { ModelDocument } from '../../protocol/model/model-document.js';
import { designColumns } from '../../protocol/specification/design-columns.js';
import type { DesignColumn, Transform } from '../../protocol/specification/types.js';
import { type Element, element, isXmlText, xmlDocument } from './xml.js';

type Factor = DesignColumn['factors'][number];

const NORMALIZATION = { identity: 'none', logistic: 'logit', exponential: 'exp' } as const;

/**
 * `model.pmml`: the model as a RegressionModel of PMML 4.4 (Data Mining Group, https://dmg.org/pmml/v4-4/Regression.html).
 * A level is a CategoricalPredictor, a product a PredictorTerm over derived fields, ln(exposure) a NumericPredictor with
 * coefficient 1; the inverse link is the normalization method none, logit or exp. A row with a missing value, or with one
 * that the model does not take, has an invalid result (`returnInvalid`), where the standard's default would score it as
 * the baseline. Levels are compared as text there, where `score` takes 1 and 1.0 for one. Coefficients of 0 have no predictor, as they have no bearing.
 *
 * Fails with `not-supported` where a name holds a character that XML 1.0 does not have.
 */
export function pmmlOf(model: ModelDocument): Checked<string> {
  const given = new Map(model.coefficients.map(({ name, value }) => [name, value]));
  const designed = designColumns(model).filter(({ name }) => (given.get(name) ?? 0) !== 0);
  const fields = new Fields(model, designed);
  const predictors = { numeric: [] as Element[], categorical: [] as Element[], term: [] as Element[] };
  for (const { name, factors } of designed) {
    const coefficient = given.get(name) ?? 0;
    const [only] = factors;
    if (factors.length > 1) {
      const references = factors.map((factor) => element('FieldRef', { field: fields.derived(factor) }));
      predictors.term.push(element('PredictorTerm', { coefficient }, ...references));
    } else if (only.kind === 'level') {
      const { column, level } = only;
      predictors.categorical.push(
        element('CategoricalPredictor', { name: column, value: level, coefficient }),
      );
    } else predictors.numeric.push(element('NumericPredictor', { name: fields.derived(only), coefficient }));
  }
  if (model.offset !== null) {
    const { kind, column } = model.offset;
    const transform = kind === 'exposure' ? 'log' : 'none';
    const name = fields.derived({ kind: 'numeric', column, transform });
    predictors.numeric.push(element('NumericPredictor', { name, coefficient: 1 }));
  }
  const table = element(
    'RegressionTable',
    { intercept: model.intercept ?? 0 },
    ...predictors.numeric,
    ...predictors.categorical,
    ...predictors.term,
  );
  const texts = [model.title, model.response.column, ...designed.map(({ name }) => name)];
  if (!texts.every(isXmlText))
    return fail('not-supported', 'A name or level holds a control character, which XML cannot carry.', {
      remedy: 'Use model.json.',
    });
  return succeed(xmlDocument(documentOf(model, fields, table)));
}

function documentOf(model: ModelDocument, fields: Fields, table: Element): Element {
  const target = model.response.column;
  const data = fields.dataFields();
  const derived = fields.derivedFields();
  const active = data.map((field) =>
    element('MiningField', {
      name: field.attributes.name,
      usageType: 'active',
      invalidValueTreatment: 'returnInvalid',
      missingValueTreatment: 'returnInvalid',
    }),
  );
  const regression = element(
    'RegressionModel',
    {
      modelName: model.title === '' ? model.response.column : model.title,
      functionName: 'regression',
      normalizationMethod: NORMALIZATION[model.inverseLink],
    },
    element('MiningSchema', {}, element('MiningField', { name: target, usageType: 'target' }), ...active),
    element(
      'Output',
      {},
      element('OutputField', {
        name: fields.unused('prediction'),
        optype: 'continuous',
        dataType: 'double',
        feature: 'predictedValue',
      }),
    ),
    ...(derived.length === 0 ? [] : [element('LocalTransformations', {}, ...derived)]),
    table,
  );
  const response = element('DataField', { name: target, optype: 'continuous', dataType: 'double' });
  return element(
    'PMML',
    { xmlns: 'http://www.dmg.org/PMML-4_4', version: '4.4' },
    element(
      'Header',
      { description: `${model.title} (fit specification ${model.specification}).` },
      element('Application', { name: 'commonfit', version: model.software.replace(/^\S+\s+/, '') }),
    ),
    element('DataDictionary', { numberOfFields: data.length + 1 }, response, ...data),
    regression,
  );
}

/** The fields of a document: columns of the table, and what is derived from them. */
class Fields {
  private readonly taken: Set<string>;
  private readonly made = new Map<string, { name: string; field: Element }>();
  private readonly used = new Map<string, Factor[]>();

  constructor(
    private readonly model: ModelDocument,
    designed: readonly DesignColumn[],
  ) {
    const factors = designed.flatMap((column) => column.factors);
    for (const factor of factors) this.use(factor);
    if (model.offset !== null) {
      const { kind, column } = model.offset;
      this.use({ kind: 'numeric', column, transform: kind === 'exposure' ? 'log' : 'none' });
    }
    this.taken = new Set([model.response.column, ...this.used.keys()]);
  }

  private use(factor: Factor): void {
    this.used.set(factor.column, [...(this.used.get(factor.column) ?? []), factor]);
  }

  unused(wanted: string): string {
    let name = wanted;
    while (this.taken.has(name)) name = `${name}_`;
    this.taken.add(name);
    return name;
  }

  /** The name of the field that holds a factor: the column itself, a transform of it, or the indicator of a level. */
  derived(factor: Factor): string {
    const { column } = factor;
    if (factor.kind === 'level') {
      const { level } = factor;
      const indicator = element('NormDiscrete', { field: column, value: level });
      return this.derivedField(`${column}=${level}`, factor, indicator);
    }
    const { transform } = factor;
    if (transform === 'none') return column;
    const [label, content] = transformElement(column, transform);
    return this.derivedField(label, factor, content);
  }

  private derivedField(label: string, factor: Factor, content: Element): string {
    const key = JSON.stringify(factor);
    const found = this.made.get(key);
    if (found !== undefined) return found.name;
    const name = this.unused(label);
    const field = element('DerivedField', { name, optype: 'continuous', dataType: 'double' }, content);
    this.made.set(key, { name, field });
    return name;
  }

  derivedFields(): Element[] {
    return [...this.made.values()].map(({ field }) => field);
  }

  dataFields(): Element[] {
    return [...this.used].map(([name, factors]) => {
      if (factors[0].kind === 'level') {
        const values = this.levelsOf(name).map((value) => element('Value', { value }));
        return element('DataField', { name, optype: 'categorical', dataType: 'string' }, ...values);
      }
      const transforms = factors.flatMap((factor) => (factor.kind === 'numeric' ? [factor.transform] : []));
      const interval = intervalOf(transforms);
      return element(
        'DataField',
        { name, optype: 'continuous', dataType: 'double' },
        ...(interval === null ? [] : [interval]),
      );
    });
  }

  /** Those that some row of the fit had; the baseline among them. */
  private levelsOf(column: string): string[] {
    const kept = new Set(this.model.coefficients.map(({ name }) => name));
    const terms = this.model.terms.flatMap((term) => (term.kind === 'product' ? term.factors : [term]));
    const levels = new Set<string>();
    for (const term of terms) {
      if (term.kind !== 'levels' || term.column !== column) continue;
      const any = term.levels.some((level) => kept.has(`${column}=${level}`));
      for (const level of term.levels)
        if (!any || level === term.baseline || kept.has(`${column}=${level}`)) levels.add(level);
    }
    return [...levels];
  }
}

function transformElement(column: string, transform: Exclude<Transform, 'none'>): [string, Element] {
  const reference = element('FieldRef', { field: column });
  if (transform === 'log') return [`ln(${column})`, element('Apply', { function: 'ln' }, reference)];
  if (transform === 'sqrt') return [`sqrt(${column})`, element('Apply', { function: 'sqrt' }, reference)];
  const { power } = transform;
  const exponent = element('Constant', { dataType: 'double' }, String(power));
  return [`${column}^${power}`, element('Apply', { function: 'pow' }, reference, exponent)];
}

/** The values at which every transform is defined: above 0, 0 and above, or all (null). */
function intervalOf(transforms: readonly Transform[]): Element | null {
  const isFractional = (transform: Transform): boolean =>
    typeof transform === 'object' && !Number.isInteger(transform.power);
  const above = transforms.some(
    (transform) =>
      transform === 'log' ||
      (typeof transform === 'object' && isFractional(transform) && transform.power < 0),
  );
  if (above) return element('Interval', { closure: 'openOpen', leftMargin: 0 });
  const from = transforms.some((transform) => transform === 'sqrt' || isFractional(transform));
  return from ? element('Interval', { closure: 'closedOpen', leftMargin: 0 }) : null;
}
